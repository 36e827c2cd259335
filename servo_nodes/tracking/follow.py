# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Following: where the goal's points went since the last image, held to the goal itself.

Two steps an image. *Carried*: pyramidal Lucas-Kanade (Bouguet 2000) from the last image to this
one, forward and back (Kalal, Mikolajczyk & Matas, ICPR 2010), says roughly where the view is now.
*Verified*: every point of the goal that should be visible is registered against the goal view
itself, so errors do not add up, and points that were lost or hidden return by themselves under
their old number.
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

# What the stubs of OpenCV say differs between its releases, and in part is wrong.
_cv: typing.Any = cv2
Index = npt.NDArray[np.intp]

WINDOW, LEVELS = (11, 11), 2
_STOP = (_cv.TERM_CRITERIA_COUNT | _cv.TERM_CRITERIA_EPS, 10, 0.02)
_MOST_RETURN_PX, _AGREE_PX, _LEAST_CARRIED, _MOST_CARRIED = 0.5, 2.0, 6, 60
_FLOOR_PX, _NEAR_PX = 0.03, 0.5


@dataclass(frozen=True, eq=False)
class Sight:
    """The goal in one image.

    Attributes
    ----------
    matrix : (3, 3), normed homography from goal to image, normalised coordinates
    index : (M,), the points seen
    uv, xy : (M, 2), px and normalised
    to_normalised : (M, 2, 2), d(x, y)/d(u, v) of the lens there
    weights : (M,), 0..1
    residual_px : float, median distance from where the homography puts them
    expected : int, how many goal points should be in the image
    depths : (M,), m, where the finder measured them itself (size of a marker); else None
    """

    matrix: Floats
    index: Index
    uv: Floats
    xy: Floats
    to_normalised: Floats
    weights: Floats
    residual_px: float
    expected: int
    depths: Floats | None = None

    def __len__(self) -> int:
        return len(self.index)


@dataclass(frozen=True, eq=False)
class Limits:
    """What a verified point satisfies: correlation, and distance from the common model, px."""

    likeness: float
    residual_px: float


def halved(grey: Grey) -> Grey:
    """Return an image of half the size, whose pixel (u, v) is centred on pixel (2u, 2v)."""
    return np.asarray(cv2.pyrDown(grey), dtype=np.uint8)


def carried(reference: Reference, camera: Camera, last: Sight, before: Grey,
            now: Grey) -> Floats | None:
    """Return the homography goal -> image after following the last points from `before` to `now`.

    Both are images of half the size (`halved`), and at most `_MOST_CARRIED` points are taken: a
    first guess need not be finer, all points are registered at full size afterwards. Returns None
    when too few return to where they came from, or agree.
    """
    taken = slice(None, None, -(-len(last) // _MOST_CARRIED))
    last_uv, last_xy, index = last.uv[taken], last.xy[taken], last.index[taken]
    start = (0.5 * last_uv).astype(np.float32)
    there, found, _ = _cv.calcOpticalFlowPyrLK(
        before, now, start, None, winSize=WINDOW, maxLevel=LEVELS, criteria=_STOP)
    back, found_back, _ = _cv.calcOpticalFlowPyrLK(
        now, before, there, None, winSize=WINDOW, maxLevel=LEVELS, criteria=_STOP)
    uv = 2.0 * np.asarray(there, dtype=np.float64).reshape(-1, 2)
    gap = np.abs(np.asarray(back).reshape(-1, 2) - start).max(-1)
    kept = np.flatnonzero((gap < _MOST_RETURN_PX) & (np.asarray(found).reshape(-1) > 0)
                          & (np.asarray(found_back).reshape(-1) > 0))
    if len(kept) < _LEAST_CARRIED:
        return None
    # The lens is linearised where the point was: near enough for a first guess.
    moved = uv[kept] - last_uv[kept]
    xy = last_xy[kept] + (last.to_normalised[taken][kept] @ moved[:, :, None])[:, :, 0]
    goal_xy = reference.xy[index[kept]]
    plane = plane_through(goal_xy, xy, _AGREE_PX / camera.fx)
    if plane is None or np.count_nonzero(plane[1]) < _LEAST_CARRIED:
        return None
    matrix = plane[0]
    return matrix if homography.depth_ratios(matrix, goal_xy).min() > 0 else -matrix


def verified(reference: Reference, camera: Camera, grey: Grey, matrix: Floats, limits: Limits, *,
             rounds: int, fits: int = 1) -> Sight | None:
    """Register the goal's points where `matrix` puts them and keep those that agree.

    `rounds` of registration at most, `fits` of the common model: one is enough from a good guess.
    Returns None when fewer than four agree, or on what is no view a camera can have.
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
    inverse = _inverse_2x2(lens[alike])
    xy = _normalised(camera, uv, guess[alike], guess_xy[alike], inverse)
    goal_xy = reference.xy[kept]
    fit = homography.robust_fit(goal_xy, xy, matrix, floor=_FLOOR_PX / camera.fx, rounds=fits)
    if fit is None:
        return None
    good = np.flatnonzero((fit.residuals * camera.fx <= limits.residual_px) & (fit.weights > 0))
    if len(good) < 4:
        return None
    normed = homography.normed(fit.matrix, goal_xy[good])
    if normed is None or not homography.plausible(normed, goal_xy[good]):
        return None
    return Sight(normed, kept[good], uv[good], xy[good], inverse[good], fit.weights[good],
                 homography.middle(fit.residuals[good]) * camera.fx, len(index))


def _normalised(camera: Camera, uv: Floats, near_uv: Floats, near_xy: Floats,
                inverse: Floats) -> Floats:
    """Return normalised coordinates of pixels that lie a few px from known ones.

    One step of Newton's method with the inverse Jacobian of the lens at those, and a second one
    when they moved far: what is left is below a thousandth of a pixel.
    """
    moved = uv - near_uv
    xy = near_xy + (inverse @ moved[:, :, None])[:, :, 0]
    if np.abs(moved).max() < _NEAR_PX:
        return typing.cast(Floats, xy)
    missing = uv - camera.pixels_from_normalised(xy)
    return typing.cast(Floats, xy + (inverse @ missing[:, :, None])[:, :, 0])


def _inverse_2x2(matrix: Floats) -> Floats:
    # Several times as fast as the general inverse for stacks of this size.
    inverse = np.empty_like(matrix)
    inverse[:, 0, 0], inverse[:, 1, 1] = matrix[:, 1, 1], matrix[:, 0, 0]
    inverse[:, 0, 1], inverse[:, 1, 0] = -matrix[:, 0, 1], -matrix[:, 1, 0]
    determinant = matrix[:, 0, 0] * matrix[:, 1, 1] - matrix[:, 0, 1] * matrix[:, 1, 0]
    inverse /= determinant[:, None, None]
    return inverse


def _within(uv: Floats, camera: Camera) -> npt.NDArray[np.bool_]:
    with np.errstate(invalid='ignore'):
        return typing.cast(npt.NDArray[np.bool_], (
            (uv > 0) & (uv < (camera.width - 1, camera.height - 1))).all(-1))
