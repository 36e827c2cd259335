# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where is the goal in this image? Followed while that holds, searched for otherwise.

Searching delivers at `consensus.acquire_points`, following gives up below `consensus.keep_points`:
the gap keeps a goal at the limit of recognition from coming and going with every image.
"""

from __future__ import annotations

import cv2
import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.tracking import consensus, follow, homography
from servo_nodes.tracking.follow import Limits, Sight
from servo_nodes.tracking.keypoints import Describer
from servo_nodes.tracking.options import TrackerSettings
from servo_nodes.tracking.pictures import Grey
from servo_nodes.tracking.reference import Reference
from servo_nodes.values import Floats

_LOOSE_LIKENESS, _LOOSE_PX = 0.6, 3.0
# Brightness steps beyond this ratio between two images are taken for a change of exposure.
_EXPOSURE_STEP = 1.12
_FEW_SHARE = 0.7
# Searching takes rays from a grid: the lens is smooth, and its exact inverse costs more.
_GRID_PX = 8


class Finder:
    """Finds a goal by its texture.

    Parameters
    ----------
    settings : TrackerSettings
    reference : Reference
    camera : Camera
    describer : Describer, the one `reference` was made with
    """

    def __init__(self, settings: TrackerSettings, reference: Reference, camera: Camera,
                 describer: Describer) -> None:
        self._options = settings.consensus
        self._limits = Limits(settings.follow.likeness, settings.follow.residual_px)
        self._reference, self._camera, self._describer = reference, camera, describer
        self._last: Sight | None = None
        self._before: Grey | None = None
        self._brightness = 0.0
        self._rays = RayGrid(camera)

    def find(self, grey: Grey, brightness: float) -> tuple[Sight | None, str]:
        """Return the goal in an image, and in words what was done, or why it was not found."""
        half = follow.halved(grey)
        sight, words = self._followed(grey, half, brightness), 'following'
        if sight is None:
            sight, words = self.search(grey)
        self._last, self._before, self._brightness = sight, half, brightness
        return sight, words

    def lose(self) -> None:
        """Forget where the goal was: the next image is searched."""
        self._last = self._before = None

    def search(self, grey: Grey) -> tuple[Sight | None, str]:
        """Look for the goal without any idea of where it is; see `consensus` for the rule."""
        reference, camera, threshold = self._reference, self._camera, self._options.threshold_px
        keypoints = self._describer.describe(grey)
        pairs = self._describer.match(reference.keypoints, keypoints)
        xy = self._rays.normalised(keypoints.uv[pairs.second])
        goal_xy = reference.keypoints_xy[pairs.first]
        sure = np.isfinite(xy[:, 0])
        xy, goal_xy = xy[sure], goal_xy[sure]
        plane = consensus.plane_through(goal_xy, xy, threshold / camera.fx)
        if plane is None:
            return None, f'goal not found: {len(xy)} keypoints resemble it, no four agree'
        agreeing = int(np.count_nonzero(plane[1]))
        alarms = consensus.log10_alarms(len(xy), agreeing, threshold, float(grey.size))
        matrix = homography.normed(plane[0], goal_xy[plane[1]])
        if matrix is None or not alarms <= consensus.LOG10_ONCE_IN:
            return None, (f'goal not found: {agreeing} of {len(xy)} keypoints agree, '
                          'no more than chance would')
        loose = Limits(_LOOSE_LIKENESS * self._limits.likeness, _LOOSE_PX)
        sight = follow.verified(reference, camera, grey, matrix, loose, rounds=3, fits=4)
        if sight is not None:
            sight = follow.verified(reference, camera, grey, sight.matrix, self._limits, rounds=3,
                                    fits=4)
        doubt = self._doubt(sight, self._options.acquire_points)
        return (None, f'goal not found: {doubt}') if doubt else (sight, 'found')

    def _followed(self, grey: Grey, half: Grey, brightness: float) -> Sight | None:
        if self._last is None or self._before is None:
            return None
        before = self._before
        ratio = (brightness + 1.0) / (self._brightness + 1.0)
        if not 1 / _EXPOSURE_STEP <= ratio <= _EXPOSURE_STEP:
            before = _exposed_as(before, half)
        matrix = follow.carried(self._reference, self._camera, self._last, before, half)
        if matrix is None:
            return None
        reference, camera, limits = self._reference, self._camera, self._limits
        sight = follow.verified(reference, camera, grey, matrix, limits, rounds=3)
        if sight is not None and len(sight) < _FEW_SHARE * sight.expected:
            # Hidden, or carried badly by a fast motion: the second time from a better guess.
            sight = follow.verified(reference, camera, grey, sight.matrix, limits, rounds=3)
        return None if self._doubt(sight, self._options.keep_points) else sight

    def _doubt(self, sight: Sight | None, least: int) -> str:
        """Return why a sight is not believed, or nothing."""
        if sight is None:
            return 'its points do not agree'
        if len(sight) < least:
            return f'{len(sight)} points verified, {least} needed'
        if len(sight) < consensus.LEAST_SHARE * sight.expected:
            return f'only {len(sight)} of {sight.expected} points in the image verified'
        if consensus.log10_chance(sight.expected, len(sight)) > consensus.LOG10_ONCE_IN:
            return f'{len(sight)} of {sight.expected} points verified, as chance might'
        if consensus.spread_px(self._reference.uv[sight.index]) < (
                consensus.LEAST_SPREAD * self._camera.height):
            return 'the verified points lie on a line or in a corner'
        return ''


class RayGrid:
    """The inverse of a lens, read from a grid: to a fifth of a pixel, in a tenth of the time."""

    def __init__(self, camera: Camera) -> None:
        u = np.arange(0, camera.width + _GRID_PX, _GRID_PX)
        v = np.arange(0, camera.height + _GRID_PX, _GRID_PX)
        grid = np.stack(np.meshgrid(u, v), axis=-1).astype(np.float64)
        self._rays = camera.normalised_from_pixels(grid).astype(np.float32)

    def normalised(self, uv: Floats) -> Floats:
        """Return normalised coordinates (N, 2) of pixels; NaN without a sure inverse."""
        if not len(uv):
            return np.empty((0, 2))
        u, v = (uv.T / _GRID_PX).astype(np.float32)
        found = cv2.remap(self._rays, u[None], v[None], cv2.INTER_LINEAR,
                          borderMode=cv2.BORDER_REPLICATE)
        return np.asarray(found, dtype=np.float64).reshape(-1, 2)


def _exposed_as(grey: Grey, other: Grey) -> Grey:
    """Return `grey` with the brightness of `other`, by matching their histograms."""
    mine, theirs = (np.cumsum(cv2.calcHist([picture], [0], None, [256], [0, 256]).reshape(-1))
                    for picture in (grey, other))
    table = np.interp(mine, theirs, np.arange(256))
    return np.asarray(cv2.LUT(grey, np.rint(table).astype(np.uint8)), dtype=np.uint8)
