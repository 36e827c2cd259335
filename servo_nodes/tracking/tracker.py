# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The tracker: images in, views out; teaches goals and aims at them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal
from servo_nodes.tracking import consensus, follow, homography
from servo_nodes.tracking import depth as depths
from servo_nodes.tracking.keypoints import Describer
from servo_nodes.tracking.options import TrackerSettings
from servo_nodes.tracking.pictures import Grey, grey_from_image, metres_from_depth
from servo_nodes.tracking.reference import Reference
from servo_nodes.values import Answer, Calibration, Floats, Image, View

__all__ = ['Lesson', 'Status', 'Tracker', 'TrackerSettings']

_OTHER_CAMERA_SHARE = 0.01


@dataclass(frozen=True, eq=False)
class Status:
    """What the tracker made of the last image, for overlay and diagnostics.

    Attributes
    ----------
    acquired : bool, points were delivered
    reason : str, in words: what is followed, or why nothing is seen
    points : int, points of the goal
    inliers : int, points delivered
    homography : (3, 3) goal px -> image px (pinhole parts), or None
    residual_px : float, median distance of the points from the common model; NaN for none
    points_px, goal_px : (N, 2), px, the delivered points in the image and in the goal view
    depth_source : str, `image`, `goal`, `marker`, `constant`, `mixed` or `none`
    """

    acquired: bool = False
    reason: str = 'no image yet'
    points: int = 0
    inliers: int = 0
    homography: Floats | None = None
    residual_px: float = float('nan')
    points_px: Floats | None = None
    goal_px: Floats | None = None
    depth_source: str = 'none'


@dataclass(frozen=True, eq=False)
class Lesson:
    """What teaching came to: the goal, or None, and the answer that says why."""

    goal: Goal | None
    answer: Answer


class Tracker:
    """Finds the goal's points in images; see `options` for the settings.

    Parameters
    ----------
    settings : TrackerSettings
    rng : numpy.random.Generator
        Seeds OpenCV's sampling; the same images then give the same views.
    """

    def __init__(self, settings: TrackerSettings, rng: np.random.Generator) -> None:
        self._rng = rng
        self._camera: Camera | None = None
        self._goal: Goal | None = None
        self._reference: Reference | None = None
        self._last: follow.Sight | None = None
        self._half: Grey | None = None
        self._status = Status()
        self._adopt(settings)

    @property
    def settings(self) -> TrackerSettings:
        """Return the settings in force."""
        return self._settings

    @property
    def status(self) -> Status:
        """Return what was made of the last image."""
        return self._status

    @property
    def camera(self) -> Camera | None:
        """Return the camera in force, None before `calibrate`."""
        return self._camera

    @property
    def goal(self) -> Goal | None:
        """Return the goal aimed at, None before `aim`."""
        return self._goal

    def adopt(self, settings: TrackerSettings) -> Answer:
        """Take new settings as a whole; a changed detector prepares the goal anew."""
        self._adopt(settings)
        self._prepare()
        return Answer(True, 'settings taken')

    def calibrate(self, calibration: Calibration) -> Answer:
        """Take the camera's calibration; the same one again costs nothing.

        The answer is a refusal, and no camera is in force, when the calibration is unusable; when it
        contradicts the goal, the camera stays and the goal is put aside.
        """
        try:
            camera = Camera.from_calibration(calibration,
                                             rectified=self._settings.image.rectified)
        except ValueError as error:
            self._camera, self._reference = None, None
            return Answer(False, f'camera_info: {error}')
        if camera == self._camera:
            return Answer(True, 'camera unchanged')
        self._camera = camera
        refusal = self._prepare()
        return Answer(False, refusal) if refusal else Answer(
            True, f'camera {camera.frame_id}, {camera.width}x{camera.height} px')

    def aim(self, goal: Goal) -> Answer:
        """Take a goal; refuse one of another camera. Before `calibrate` the question is put off."""
        if self._camera is not None:
            refusal = _mismatch(goal.camera, self._camera)
            if refusal:
                return Answer(False, refusal)
        self._goal = goal
        self._prepare()
        if self._reference is None:
            return Answer(True, 'goal taken; it is used when the camera is known')
        return Answer(True, f'goal taken: {len(self._reference)} points')

    def look(self, image: Image, depth: Image | None = None) -> View:
        """Return the goal's points in an image; an empty view, and `status`, when there are none."""
        try:
            grey = grey_from_image(image)
        except ValueError as error:
            return self._nothing(image, str(error))
        camera, reference = self._camera, self._reference
        if camera is None:
            return self._nothing(image, 'no usable camera_info yet')
        if reference is None:
            return self._nothing(image, 'no goal: teach one, or set goal.folder')
        if grey.shape != (camera.height, camera.width):
            return self._nothing(image, f'image size: expected {camera.width}x{camera.height} px as '
                                 f'camera_info says, got {grey.shape[1]}x{grey.shape[0]}')
        sight = self._seen(reference, camera, grey)
        if sight is None:
            return self._nothing(image, self._status.reason)
        return self._view(image, depth, reference, camera, sight)

    def teach(self, image: Image, depth: Image | None = None, *, taught: str) -> Lesson:
        """Make a goal of what the camera sees now, judged; aiming at it is the caller's to do."""
        if self._camera is None:
            return Lesson(None, Answer(False, 'no usable camera_info yet'))
        try:
            grey = grey_from_image(image)
            plane = np.array([0.0, 0.0, 1.0, self._settings.teach.distance])
            goal = Goal(grey, self._camera, plane, None, taught)
        except ValueError as error:
            return Lesson(None, Answer(False, str(error)))
        return Lesson(goal, Answer(True, 'taught'))

    def _adopt(self, settings: TrackerSettings) -> None:
        self._settings = settings
        self._describer = Describer('orb' if settings.detector.kind != 'sift' else 'sift',
                                    settings.detector.features)
        self._limits = follow.Limits(settings.follow.likeness, settings.follow.residual_px)

    def _prepare(self) -> str:
        """Make the reference of the present goal and camera; return why not, or nothing."""
        self._last = self._reference = None
        if self._goal is None or self._camera is None:
            return ''
        refusal = _mismatch(self._goal.camera, self._camera)
        if not refusal:
            self._reference = Reference(self._goal, points=self._settings.detector.points,
                                        describer=self._describer)
        return refusal

    def _seen(self, reference: Reference, camera: Camera, grey: Grey) -> follow.Sight | None:
        half = follow.halved(grey)
        sight = None
        if self._last is not None and self._half is not None:
            matrix = follow.carried(reference, camera, self._last, self._half, half)
            if matrix is not None:
                sight = follow.verified(reference, camera, grey, matrix, self._limits, rounds=2)
                if sight is not None and not self._believed(sight, 'keep'):
                    sight = None
        if sight is None:
            sight = self._acquired(reference, camera, grey)
        self._last, self._half = sight, half
        return sight

    def _acquired(self, reference: Reference, camera: Camera, grey: Grey) -> follow.Sight | None:
        keypoints = self._describer.describe(grey)
        pairs = self._describer.match(reference.keypoints, keypoints)
        xy = camera.normalised_from_pixels(keypoints.uv[pairs.second])
        goal_xy = reference.keypoints_xy[pairs.first]
        sure = np.isfinite(xy[:, 0])
        threshold = self._settings.consensus.threshold_px
        plane = consensus.plane_through(goal_xy[sure], xy[sure], threshold / camera.fx)
        self._status = replace(Status(), reason='goal not found')
        if plane is None:
            return None
        alarms = consensus.log10_alarms(int(sure.sum()), int(plane[1].sum()), threshold,
                                        float(grey.size))
        matrix = homography.normed(plane[0], goal_xy[sure][plane[1]])
        if matrix is None or not alarms < np.log10(consensus.ONCE_IN):
            return None
        loose = follow.Limits(0.6 * self._limits.likeness, 3.0)
        sight = follow.verified(reference, camera, grey, matrix, loose, rounds=3)
        if sight is not None:
            sight = follow.verified(reference, camera, grey, sight.matrix, self._limits, rounds=3)
        return sight if sight is not None and self._believed(sight, 'acquire') else None

    def _believed(self, sight: follow.Sight, when: str) -> bool:
        options = self._settings.consensus
        least = options.acquire_points if when == 'acquire' else options.keep_points
        return (len(sight) >= least and len(sight) >= consensus.LEAST_SHARE * sight.expected
                and consensus.log10_chance(sight.expected, len(sight))
                <= np.log10(consensus.ONCE_IN))

    def _view(self, image: Image, depth: Image | None, reference: Reference, camera: Camera,
              sight: follow.Sight) -> View:
        goal_depths = reference.depths[sight.index]
        z = goal_depths * homography.depth_ratios(sight.matrix, reference.xy[sight.index])
        source = 'goal'
        if depth is not None:
            measured = depths.depths_in_image(metres_from_depth(depth), sight.uv)
            z, source = np.where(np.isfinite(measured), measured, z), 'image'
        self._status = Status(
            True, f'following {len(sight)} of {len(reference)} points', len(reference), len(sight),
            homography.pixel_matrix(sight.matrix, reference.goal.camera, camera),
            sight.residual_px, sight.uv, reference.uv[sight.index], source)
        return View(image.stamp, image.frame_id, sight.xy, reference.xy[sight.index], z, goal_depths,
                    sight.weights, sight.index.astype(np.uint32))

    def _nothing(self, image: Image, reason: str) -> View:
        points = 0 if self._reference is None else len(self._reference)
        self._status = Status(reason=reason, points=points)
        return View.empty(image.stamp, image.frame_id)


def _mismatch(goal: Camera, camera: Camera) -> str:
    """Return the sentence that says why a goal's camera is not this one, or nothing."""
    if goal.size != camera.size:
        return (f'goal: expected the camera it was taught with, {goal.width}x{goal.height} px, '
                f'got {camera.width}x{camera.height}')
    if goal.frame_id and camera.frame_id and goal.frame_id != camera.frame_id:
        return f'goal: expected camera frame {goal.frame_id!r}, got {camera.frame_id!r}'
    share = np.array([(a, b) for a in (0.1, 0.5, 0.9) for b in (0.1, 0.5, 0.9)])
    uv = share * camera.size
    with np.errstate(invalid='ignore'):
        moved = camera.pixels_from_normalised(goal.normalised_from_pixels(uv)) - uv
    worst = float(np.nanmax(np.abs(moved), initial=0.0))
    if worst > _OTHER_CAMERA_SHARE * camera.width:
        return (f'goal: expected the calibration it was taught with (fx = {goal.fx:.1f}), got one '
                f'(fx = {camera.fx:.1f}) that puts the same ray {worst:.1f} px away; teach again')
    return ''


