# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Teaching: from what the camera sees now to a judged goal."""

from __future__ import annotations

import typing
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal
from servo_nodes.tracking import depth as depths
from servo_nodes.tracking import judge
from servo_nodes.tracking.ambiguity import alike_elsewhere
from servo_nodes.tracking.follow import Limits
from servo_nodes.tracking.keypoints import Describer
from servo_nodes.tracking.markers import CORNER_FLOOR_PX, MarkerReference, Markers
from servo_nodes.tracking.options import TrackerSettings
from servo_nodes.tracking.pictures import Grey, Metres, grey_from_image, metres_from_depth
from servo_nodes.tracking.reference import Reference
from servo_nodes.values import Answer, Floats, Image

_LEAST_MARKER_POINTS = 4
_FLAT_SHARE, _FLAT = 0.01, 0.002
_GRID_PX = 24


@dataclass(frozen=True, eq=False)
class Lesson:
    """What teaching came to: the goal, or None, and the answer that says why."""

    goal: Goal | None
    answer: Answer


def taught(image: Image, depth: Image | None, camera: Camera, settings: TrackerSettings,
           how: str) -> Lesson:
    """Make a goal of an image and judge it; the verdict is written into its `checks`."""
    try:
        grey = grey_from_image(image)
        if grey.shape != (camera.height, camera.width):
            raise ValueError(f'image size: expected {camera.width}x{camera.height} px as '
                             f'camera_info says, got {grey.shape[1]}x{grey.shape[0]}')
        plane, kept, source = _shape(depth, camera, settings.teach.distance)
        goal = Goal(grey, camera, plane, kept, how)
        verdict, count = _verdict(goal, settings)
    except ValueError as error:
        return Lesson(None, Answer(False, str(error)))
    refusal = verdict.refusal
    if verdict.warnings and not refusal and not settings.teach.accept_warnings:
        refusal = '; '.join(verdict.warnings)
    if refusal:
        return Lesson(None, Answer(False, f'refused: {refusal}'))
    words = '; '.join(verdict.warnings)
    checks = {'verdict': 'warned' if words else 'accepted', 'warnings': list(verdict.warnings),
              'depth_from': source, 'detector': settings.detector.kind, **verdict.figures}
    text = f'taught {count} points, depth from {source}' + (f'; warning: {words}' if words else '')
    return Lesson(replace(goal, checks=checks), Answer(True, text))


def _shape(image: Image | None, camera: Camera, distance: float) -> tuple[
        Floats, npt.NDArray[np.float32] | None, str]:
    """Return the plane, the depth map where the target is not flat, and where they come from."""
    frontal = np.array([0.0, 0.0, 1.0, distance])
    if image is None:
        return frontal, None, 'teach.distance'
    metres = _registered(image, camera)
    columns = np.arange(_GRID_PX // 2, camera.width, _GRID_PX)
    rows = np.arange(_GRID_PX // 2, camera.height, _GRID_PX)
    uv = np.stack(np.meshgrid(columns, rows), axis=-1).reshape(-1, 2).astype(np.float64)
    xy = camera.normalised_from_pixels(uv)
    sure = np.isfinite(xy[:, 0])
    fitted = depths.plane_in_depth(metres, xy[sure], uv[sure])
    if fitted is None:
        return frontal, metres, 'depth image'
    plane, deviation = fitted
    if deviation <= max(_FLAT, _FLAT_SHARE * plane[3]):
        return plane, None, 'plane in the depth image'
    return plane, metres, 'depth image'


def _registered(image: Image, camera: Camera) -> Metres:
    metres = metres_from_depth(image)
    if metres.shape != (camera.height, camera.width):
        raise ValueError(f'depth size: expected {camera.width}x{camera.height} px as the image '
                         f'has, got {metres.shape[1]}x{metres.shape[0]}')
    return metres


def _verdict(goal: Goal, settings: TrackerSettings) -> tuple[judge.Verdict, int]:
    if settings.detector.kind == 'marker':
        found = MarkerReference(goal, Markers(settings.marker))
        # A corner's own noise is not known from its patch: what refinement reaches, over the
        # noise.
        scatter = np.full(len(found), CORNER_FLOOR_PX / judge.noise_of(_grey(goal)))
        evidence = judge.Evidence(found.uv, found.xy, found.depths, scatter)
        return judge.judged(goal, evidence, least_points=_LEAST_MARKER_POINTS,
                            elsewhere=None), len(found)
    describer = Describer(settings.detector.kind, settings.detector.features)
    reference = Reference(goal, points=settings.detector.points, describer=describer)
    evidence = judge.Evidence(reference.uv, reference.xy, reference.depths,
                              reference.patches.scatter_px)
    limits = Limits(settings.follow.likeness, settings.follow.residual_px)
    alike = alike_elsewhere(reference, describer, limits, settings.consensus.acquire_points)
    return judge.judged(goal, evidence, least_points=settings.teach.least_points,
                        elsewhere=alike), len(reference)


def _grey(goal: Goal) -> Grey:
    return typing.cast(Grey, goal.view)
