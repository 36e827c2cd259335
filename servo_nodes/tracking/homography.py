# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The map of a plane between two views, in normalised coordinates.

With X_c = R X_g + t the motion of a point from the goal's optical frame to the current one and the
plane n . X_g = d, every point of it obeys X_c = (R + t n^T / d) X_g = H X_g. With X = Z (x, y, 1):

    Z_c (x_c, 1) = Z_g H (x_g, 1)   =>   x_c = pi(H (x_g, 1)),   Z_c / Z_g = (H (x_g, 1))_3.

A homography found from points is known up to a factor; the true one has its middle singular value
equal to 1 (the direction orthogonal to n and to R^T t is only turned), and a positive depth fixes
the sign. So the ratio of depths needs neither R, t nor n: only H. Source: Faugeras & Lustman 1988;
Ma, Soatto, Kosecka & Sastry, An Invitation to 3-D Vision, 2004, ch. 5.3 (from memory, re-derived).

The robust fit minimises sum w |x_c - pi(H x_g)|^2 by iterated linear least squares on the eight
free numbers, with Tukey's weights (c = 4.685; 95 % efficient for Gaussian noise).
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.values import Floats

TUKEY = 4.685
# The median of |e| for two independent Gaussian components of scale 1 (Rayleigh): sqrt(2 ln 2).
_RAYLEIGH_MEDIAN = 1.17741
_LEAST_BELOW = 1e-12
# The residual of a point behind the camera: beyond any other, and finite.
_NOWHERE = 1e6


@dataclass(frozen=True, eq=False)
class Fit:
    """A robust homography `matrix` (3, 3), with `weights` 0..1 and `residuals` (N,)."""

    matrix: Floats
    weights: Floats
    residuals: Floats
    scale: float


def middle(numbers: Floats) -> float:
    """Return the upper median of numbers (N,): a tenth of the time of `np.median`."""
    half = len(numbers) // 2
    return float(np.partition(numbers, half)[half])


def mapped(matrix: Floats, xy: Floats) -> Floats:
    """Return pi(H (x, 1)), (N, 2); NaN where a point falls behind the camera."""
    image = xy @ matrix[:, :2].T + matrix[:, 2]
    below = image[:, 2:]
    return typing.cast(Floats, image[:, :2] / np.where(below > 1e-9, below, np.nan))


def mapped_and_jacobian(matrix: Floats, xy: Floats) -> tuple[Floats, Floats]:
    """Return pi(H (x, 1)), (N, 2), and its change with x, (N, 2, 2)."""
    image = xy @ matrix[:, :2].T + matrix[:, 2]
    below = np.where(image[:, 2:] > 1e-9, image[:, 2:], np.nan)
    there = image[:, :2] / below
    jacobian = matrix[:2, :2] - there[:, :, None] * matrix[2, :2]
    return there, typing.cast(Floats, jacobian / below[:, :, None])


def normed(matrix: Floats, xy: Floats) -> Floats | None:
    """Return H with middle singular value 1, positive at `xy`; None when it is no view."""
    singular = np.linalg.svd(matrix, compute_uv=False)
    if not (np.isfinite(singular).all() and singular[2] > 1e-6 * singular[0]):
        return None
    scaled = matrix / singular[1]
    depths = xy @ scaled[2, :2] + scaled[2, 2]
    if depths[0] < 0:
        scaled, depths = -scaled, -depths
    return typing.cast(Floats, scaled) if (depths > 0).all() else None


def depth_ratios(matrix: Floats, goal_xy: Floats) -> Floats:
    """Return Z_c / Z_g (N,) for a normed H; see the module's head."""
    return typing.cast(Floats, goal_xy @ matrix[2, :2] + matrix[2, 2])


def plausible(matrix: Floats, goal_xy: Floats, *, least_scale: float = 0.2,
              most_scale: float = 5.0, most_skew: float = 6.0) -> bool:
    """Say whether a normed H is a view a camera can have: not mirrored, not edge-on, not a speck.

    The local map at every point keeps orientation, scales by `least_scale` to `most_scale`, and
    stretches one direction at most `most_skew` times the other (a tilt of about 80 degrees).
    """
    jacobian = mapped_and_jacobian(matrix, goal_xy)[1]
    determinant = (jacobian[:, 0, 0] * jacobian[:, 1, 1] - jacobian[:, 0, 1] * jacobian[:, 1, 0])
    if not (determinant > 0).all():
        return False
    square = (jacobian ** 2).sum((1, 2))
    root = np.sqrt(np.maximum(square ** 2 - 4 * determinant ** 2, 0.0))
    large, small = np.sqrt((square + root) / 2), np.sqrt(np.maximum((square - root) / 2, 1e-18))
    scale = np.sqrt(determinant)
    return bool(((least_scale <= scale) & (scale <= most_scale)
                 & (large / small <= most_skew)).all())


def robust_fit(goal_xy: Floats, xy: Floats, start: Floats | None = None, *, floor: float,
               trust: Floats | None = None, rounds: int = 4) -> Fit | None:
    """Fit a homography to points of which a minority may be wrong.

    Parameters
    ----------
    goal_xy, xy : (N, 2), normalised
    start : (3, 3), a first guess for the first residuals; None: all count alike
    floor : float
        Least standard deviation believed, in the unit of `xy`: half the residuals may be equal.
    trust : (N,), prior weights
    rounds : int

    Returns
    -------
    Fit or None
        None for fewer than four points or a singular system.
    """
    count = len(xy)
    if count < 4:
        return None
    trust = np.ones(count) if trust is None else trust
    weights, matrix, scale = trust, start, floor
    for _ in range(rounds):
        if matrix is not None:
            weights, _, scale = _weighed(matrix, goal_xy, xy, floor)
            weights = weights * trust
        if np.count_nonzero(weights > 0) < 4:
            return None
        matrix = _linear(goal_xy, xy, weights, matrix)
        if matrix is None:
            return None
    if matrix is None:
        return None
    weights, residuals, scale = _weighed(matrix, goal_xy, xy, floor)
    return Fit(matrix, weights, residuals, scale)


def _weighed(matrix: Floats, goal_xy: Floats, xy: Floats,
             floor: float) -> tuple[Floats, Floats, float]:
    difference = mapped(matrix, goal_xy) - xy
    residuals = np.hypot(difference[:, 0], difference[:, 1])
    residuals[np.isnan(residuals)] = _NOWHERE
    scale = max(middle(residuals) / _RAYLEIGH_MEDIAN, floor)
    u = np.minimum(residuals / (TUKEY * scale), 1.0)
    return (1 - u * u) ** 2, residuals, scale


def _linear(goal_xy: Floats, xy: Floats, weights: Floats, former: Floats | None) -> Floats | None:
    """Solve p . h1 - x p . h3 = 0, p . h2 - y p . h3 = 0 with p = (x_g, y_g, 1) and h33 = 1.

    The normal equations of all points are sums of w (1, x, y, x^2 + y^2) times p p^T: one product.
    """
    p = np.ones((len(xy), 3))
    p[:, :2] = goal_xy
    # Divided by the former denominator, the algebraic residual is the geometric one.
    below = 1.0 if former is None else p @ former[2]
    factors = np.ones((4, len(xy)))
    factors[1:3] = xy.T
    factors[3] = (xy * xy).sum(-1)
    factors *= weights / np.maximum(below * below, _LEAST_BELOW)
    one, x, y, square = (factors @ (p[:, :, None] * p[:, None, :]).reshape(-1, 9)).reshape(4, 3, 3)
    normal = np.zeros((9, 9))
    normal[:3, :3] = normal[3:6, 3:6] = one
    normal[:3, 6:] = normal[6:, :3] = -x
    normal[3:6, 6:] = normal[6:, 3:6] = -y
    normal[6:, 6:] = square
    try:
        solution = np.linalg.solve(normal[:8, :8], -normal[:8, 8])
    except np.linalg.LinAlgError:
        return None
    matrix = np.append(solution, 1.0).reshape(3, 3)
    return matrix if bool(np.isfinite(matrix).all()) else None


def pixel_matrix(matrix: Floats, goal_camera: Camera, camera: Camera) -> Floats:
    """Return the homography of pixels nearest to `matrix` through both lenses, for drawing.

    Exact without distortion; else the pinhole parts alone.
    """
    fx, fy, cx, cy = goal_camera.fx, goal_camera.fy, goal_camera.cx, goal_camera.cy
    inverse = np.array([[1 / fx, 0, -cx / fx], [0, 1 / fy, -cy / fy], [0, 0, 1.0]])
    result = camera.matrix @ matrix @ inverse
    return typing.cast(Floats, result / result[2, 2])
