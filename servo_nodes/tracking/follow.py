# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Following: where the goal's points went since the last image, and holding them to the goal itself.

Two steps an image. *Carried*: pyramidal Lucas-Kanade (Bouguet 2000) from the last image to this one,
forward and back (Kalal, Mikolajczyk & Matas, ICPR 2010), says roughly where the view is now. *Verified*:
every point of the goal that should be visible is registered against the goal view itself, so errors do
not add up, and points that were lost or hidden return by themselves under their old number.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.camera import Camera
from servo_nodes.tracking import homography
from servo_nodes.tracking.consensus import plane_through
from servo_nodes.tracking.pictures import Grey
from servo_nodes.tracking.reference import Reference
from servo_nodes.values import Floats

Index = npt.NDArray[np.intp]

WINDOW, LEVELS = (13, 13), 2
_STOP = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 12, 0.03)
_MOST_RETURN_PX = 0.5
_FLOOR_PX = 0.03


@dataclass(frozen=True, eq=False)
class Sight:
    """The goal in one image.

    Attributes
    ----------
    matrix : (3, 3), normed homography from goal to image, normalised coordinates
    index : (M,), the points seen
    uv, xy : (M, 2), px and normalised
    weights : (M,), 0..1
    residual_px : float, median distance from where the homography puts them
    expected : int, how many goal points should be in the image
    """

    matrix: Floats
    index: Index
    uv: Floats
    xy: Floats
    weights: Floats
    residual_px: float
    expected: int

    def __len__(self) -> int:
        return len(self.index)


@dataclass(frozen=True, eq=False)
class Limits:
    """What a verified point must satisfy: correlation, and distance from the others' opinion, px."""

    likeness: float
    residual_px: float


def halved(grey: Grey) -> Grey:
    """Return the image at half its size: pixel u there is 2 u here."""
    return typing.cast(Grey, cv2.pyrDown(grey))


def carried(reference: Reference, camera: Camera, last: Sight, before: Grey,
            now: Grey) -> Floats | None:
    """Return the homography goal -> image after following the last points; None when they are lost.

    `before` and `now` are the last image and this one, `halved`: enough to start from, a quarter of
    the work.
    """
    start = (last.uv / 2).astype(np.float32)
    there, found, _ = cv2.calcOpticalFlowPyrLK(
        before, now, start, None, winSize=WINDOW, maxLevel=LEVELS, criteria=_STOP)
    back, found_back, _ = cv2.calcOpticalFlowPyrLK(
        now, before, there, None, winSize=WINDOW, maxLevel=LEVELS, criteria=_STOP)
    uv = 2 * np.asarray(there, dtype=np.float64).reshape(-1, 2)
    gap = np.asarray(back).reshape(-1, 2) - start
    kept = (np.asarray(found).reshape(-1) & np.asarray(found_back).reshape(-1)).astype(bool)
    kept &= np.einsum('ni,ni->n', gap, gap) < _MOST_RETURN_PX ** 2
    if kept.sum() < 6:
        return None
    xy = camera.normalised_from_pixels(uv[kept], near=last.xy[kept])
    sure = np.isfinite(xy[:, 0])
    goal_xy = reference.xy[last.index[kept]][sure]
    plane = plane_through(goal_xy, xy[sure], 2.0 / camera.fx)
    if plane is None or plane[1].sum() < 6:
        return None
    return homography.normed(plane[0], reference.xy[last.index])


def verified(reference: Reference, camera: Camera, soft: Grey, matrix: Floats, limits: Limits, *,
             rounds: int) -> Sight | None:
    """Register the goal's points where `matrix` puts them and keep those that agree.

    Returns None when fewer than four do, or when what they agree on is no view a camera can have.
    """
    below = homography.depth_ratios(matrix, reference.xy)
    ahead = np.flatnonzero(below > 1e-3)
    xy = homography.mapped(matrix, reference.xy[ahead])
    guess = camera.pixels_from_normalised(xy)
    inside = _within(guess, camera)
    index, xy, guess = ahead[inside], xy[inside], guess[inside]
    if len(index) < 4:
        return None
    local = (camera.pixel_jacobian(xy) @ homography.map_jacobian(matrix, reference.xy[index])
             @ reference.from_pixels[index])
    found = reference.patches.register(soft, guess, local, index, rounds=rounds)
    alike = found.likeness >= limits.likeness
    if alike.sum() < 4:
        return None
    xy = camera.normalised_from_pixels(found.uv, near=xy)
    alike &= np.isfinite(xy[:, 0])
    kept = index[alike]
    fit = homography.robust_fit(reference.xy[kept], xy[alike], matrix,
                                floor=_FLOOR_PX / camera.fx)
    if fit is None:
        return None
    near = fit.residuals * camera.fx <= limits.residual_px
    good = near & (fit.weights > 0)
    if good.sum() < 4:
        return None
    normed = homography.normed(fit.matrix, reference.xy[kept[good]])
    if normed is None or not homography.plausible(normed, reference.xy[kept[good]]):
        return None
    return Sight(normed, kept[good], found.uv[alike][good], xy[alike][good], fit.weights[good],
                 float(np.median(fit.residuals[good]) * camera.fx), len(index))


def _within(uv: Floats, camera: Camera) -> npt.NDArray[np.bool_]:
    with np.errstate(invalid='ignore'):
        return typing.cast(npt.NDArray[np.bool_], (
            (uv > 0) & (uv < (camera.width - 1, camera.height - 1))).all(-1))
