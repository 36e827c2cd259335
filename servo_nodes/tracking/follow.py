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
    lens = camera.pixel_jacobian(last.xy[kept])
    xy = _normalised(camera, uv[kept], last.uv[kept], last.xy[kept], lens)
    plane = plane_through(reference.xy[last.index[kept]], xy, 2.0 / camera.fx)
    if plane is None or plane[1].sum() < 6:
        return None
    return homography.normed(plane[0], reference.xy[last.index])


def verified(reference: Reference, camera: Camera, grey: Grey, matrix: Floats, limits: Limits, *,
             rounds: int) -> Sight | None:
    """Register the goal's points where `matrix` puts them and keep those that agree.

    Returns None when fewer than four do, or when what they agree on is no view a camera can have.
    """
    guess_xy, change = homography.mapped_and_jacobian(matrix, reference.xy)
    guess, lens = camera.pixels_and_jacobian(guess_xy)
    index = np.flatnonzero(_within(guess, camera))
    if len(index) < 4:
        return None
    guess_xy, guess, lens = guess_xy[index], guess[index], lens[index]
    local = lens @ change[index] @ reference.from_pixels[index]
    found = reference.patches.register(grey, guess, local, index, rounds=rounds)
    alike = np.flatnonzero(found.likeness >= limits.likeness)
    if len(alike) < 4:
        return None
    kept, uv = index[alike], found.uv[alike]
    xy = _normalised(camera, uv, guess[alike], guess_xy[alike], lens[alike])
    goal_xy = reference.xy[kept]
    fit = homography.robust_fit(goal_xy, xy, matrix, floor=_FLOOR_PX / camera.fx, rounds=rounds)
    if fit is None:
        return None
    good = np.flatnonzero((fit.residuals * camera.fx <= limits.residual_px) & (fit.weights > 0))
    if len(good) < 4:
        return None
    normed = homography.normed(fit.matrix, goal_xy[good])
    if normed is None or not homography.plausible(normed, goal_xy[good]):
        return None
    return Sight(normed, kept[good], uv[good], xy[good], fit.weights[good],
                 float(np.median(fit.residuals[good]) * camera.fx), len(index))


def _normalised(camera: Camera, uv: Floats, near_uv: Floats, near_xy: Floats,
                lens: Floats) -> Floats:
    """Return normalised coordinates of pixels that lie a few px from known ones.

    Two steps of Newton's method on the Jacobian `lens` at those: the rest is of the third order in the
    distance over the focal length, far below a thousandth of a pixel.
    """
    inverse = np.linalg.inv(lens)
    xy = near_xy + (inverse @ (uv - near_uv)[:, :, None])[:, :, 0]
    missing = uv - camera.pixels_from_normalised(xy)
    return typing.cast(Floats, xy + (inverse @ missing[:, :, None])[:, :, 0])


def _within(uv: Floats, camera: Camera) -> npt.NDArray[np.bool_]:
    with np.errstate(invalid='ignore'):
        return typing.cast(npt.NDArray[np.bool_], (
            (uv > 0) & (uv < (camera.width - 1, camera.height - 1))).all(-1))
