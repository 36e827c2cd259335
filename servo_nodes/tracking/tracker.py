# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The tracker: images in, views out; teaches goals and aims at them."""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal
from servo_nodes.tracking import depth, homography, lesson
from servo_nodes.tracking.finder import Finder
from servo_nodes.tracking.follow import Sight
from servo_nodes.tracking.health import Health
from servo_nodes.tracking.keypoints import Describer
from servo_nodes.tracking.lesson import Lesson
from servo_nodes.tracking.markers import MarkerFinder, MarkerReference, Markers
from servo_nodes.tracking.options import TrackerSettings
from servo_nodes.tracking.pictures import Grey, Metres, grey_from_image, metres_from_depth
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
    homography : (3, 3) goal px -> image px (exact without lens distortion), or None
    residual_px : float, median distance of the points from the common model; NaN for none
    points_px, goal_px : (N, 2), px, the delivered points in the image and in the goal view
    depth_source : str, where depths come from and how many: `goal 97`, `image 80, goal 12`, `none`
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


class Tracker:
    """Finds the goal's points in images; see `options` for the settings.

    Parameters
    ----------
    settings : TrackerSettings
    rng : numpy.random.Generator
        Seeds OpenCV's sampling, so that the same images give the same views.
    """

    def __init__(self, settings: TrackerSettings, rng: np.random.Generator) -> None:
        cv2.setRNGSeed(int(rng.integers(2 ** 31)))
        self._settings = settings
        self._camera: Camera | None = None
        self._goal: Goal | None = None
        self._reference: Reference | MarkerReference | None = None
        self._finder: Finder | MarkerFinder | None = None
        self._health = Health()
        self._status = Status()

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
        """Take new settings as a whole; the goal is prepared anew and found anew."""
        former = self._settings
        self._settings = settings
        was_ready = self._reference is not None
        try:
            refusal = self._prepare()
        except ValueError as error:
            refusal, was_ready = str(error), True
        if refusal and was_ready:
            self._settings = former
            self._prepare()
            return Answer(False, refusal)
        return Answer(True, 'settings taken')

    def calibrate(self, calibration: Calibration) -> Answer:
        """Take the camera's calibration; the same one again costs nothing.

        An unusable calibration leaves no camera in force; one that contradicts the goal stays, and
        the goal is put aside until the camera is the right one or another goal is taken.
        """
        try:
            camera = Camera.from_calibration(calibration,
                                             rectified=self._settings.image.rectified)
        except ValueError as error:
            self._camera = None
            self._prepare()
            return Answer(False, f'camera_info: {error}')
        if camera == self._camera:
            return Answer(True, 'camera unchanged')
        self._camera = camera
        refusal = self._prepare()
        return Answer(not refusal, refusal or (
            f'camera {camera.frame_id}, {camera.width}x{camera.height} px'))

    def aim(self, goal: Goal) -> Answer:
        """Take a goal; refuse one of another camera, as soon as there is a camera."""
        refusal = '' if self._camera is None else _mismatch(goal.camera, self._camera)
        if refusal:
            return Answer(False, refusal)
        former = self._goal
        self._goal = goal
        refusal = self._prepare()
        if refusal:
            self._goal = former
            self._prepare()
            return Answer(False, refusal)
        if self._reference is None:
            return Answer(True, 'goal taken; it is used as soon as the camera is known')
        return Answer(True, f'goal taken: {len(self._reference)} points')

    def look(self, image: Image, depth: Image | None = None) -> View:
        """Return the goal's points in an image; an empty view, and why in `status`, for none."""
        try:
            grey = grey_from_image(image)
        except ValueError as error:
            return self._nothing(image, str(error))
        camera, reference, finder = self._camera, self._reference, self._finder
        if camera is None:
            return self._nothing(image, 'no usable camera_info yet')
        if reference is None or finder is None:
            return self._nothing(image, self._without_goal())
        if grey.shape != (camera.height, camera.width):
            return self._nothing(image, _other_size(grey, camera))
        fault = self._health.fault(grey, image.stamp,
                                   frozen_stops=self._settings.image.frozen_stops)
        if fault:
            finder.lose()
            return self._nothing(image, fault)
        sight, words = finder.find(grey, self._health.brightness)
        if sight is None:
            return self._nothing(image, words)
        return self._view(image, depth, words, camera, reference, sight)

    def teach(self, image: Image, depth: Image | None = None, *, taught: str) -> Lesson:
        """Make a goal of what the camera sees now, and judge it; to aim at it is the caller's.

        Parameters
        ----------
        image : Image
        depth : Image, optional, 16UC1 mm or 32FC1 m, registered to the image
        taught : str, how, for the record
        """
        if self._camera is None:
            return Lesson(None, Answer(False, 'no usable camera_info yet'))
        return lesson.taught(image, depth, self._camera, self._settings, taught)

    def _prepare(self) -> str:
        """Make what is needed to find the present goal; return why it cannot be, or nothing."""
        self._reference = self._finder = None
        if self._goal is None or self._camera is None:
            return ''
        refusal = _mismatch(self._goal.camera, self._camera)
        if refusal:
            return refusal
        settings = self._settings
        reference: Reference | MarkerReference
        if settings.detector.kind == 'marker':
            markers = Markers(settings.marker)
            reference = MarkerReference(self._goal, markers)
            if not len(reference):
                return ('goal: expected markers of marker.dictionary = '
                        f'{settings.marker.dictionary} in its view, got none')
            self._finder = MarkerFinder(reference, self._camera, markers)
        else:
            describer = Describer(settings.detector.kind, settings.detector.features)
            reference = Reference(self._goal, points=settings.detector.points,
                                  describer=describer)
            if len(reference) < settings.consensus.acquire_points:
                return (f'goal: expected at least {settings.consensus.acquire_points} points to '
                        f'follow in its view, got {len(reference)}')
            self._finder = Finder(settings, reference, self._camera, describer)
        self._reference = reference
        return ''

    def _without_goal(self) -> str:
        if self._goal is None:
            return 'no goal: teach one, or set goal.folder'
        return _mismatch(self._goal.camera, self._camera) if self._camera else 'no camera'

    def _view(self, image: Image, depth_image: Image | None, words: str, camera: Camera,
              reference: Reference | MarkerReference, sight: Sight) -> View:
        goal_xy, options = reference.xy[sight.index], self._settings
        metres, trouble = _metres(depth_image, camera)
        depths = depth.chosen(
            options.depth.source, ratios=homography.depth_ratios(sight.matrix, goal_xy),
            goal=reference.depths[sight.index], constant=options.teach.distance,
            found=sight.depths,
            measured=None if metres is None else depth.depths_in_image(metres, sight.uv))
        self._status = Status(
            True, f'{words}: {len(sight)} of {len(reference)} points{trouble}', len(reference),
            len(sight), homography.pixel_matrix(sight.matrix, reference.goal.camera, camera),
            sight.residual_px, sight.uv, reference.uv[sight.index], depths.source)
        return View(image.stamp, image.frame_id, sight.xy, goal_xy, depths.now, depths.goal,
                    sight.weights, reference.ids[sight.index])

    def _nothing(self, image: Image, reason: str) -> View:
        points = 0 if self._reference is None else len(self._reference)
        self._status = Status(reason=reason, points=points)
        return View.empty(image.stamp, image.frame_id)


def _metres(image: Image | None, camera: Camera) -> tuple[Metres | None, str]:
    """Return a depth image in metres, or None and what is wrong with it."""
    if image is None:
        return None, ''
    try:
        metres = metres_from_depth(image)
    except ValueError as error:
        return None, f'; depth {error}'
    if metres.shape != (camera.height, camera.width):
        return None, f'; depth {_other_size(metres, camera)}'
    return metres, ''


def _other_size(picture: Grey | Metres, camera: Camera) -> str:
    return (f'image size: expected {camera.width}x{camera.height} px as camera_info says, '
            f'got {picture.shape[1]}x{picture.shape[0]}')


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


