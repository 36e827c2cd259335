# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Image moments of point sets and of regions, and their interaction matrices.

With n_ij = mu_ij / area for a region bounded by a polygon, and the mean of the centred products
for a set of points, on a plane parallel to the image at depth Z (Chaumette 2004; Tahri & Chaumette
2005; formulas from memory, re-derived; k = 4 for a region, 1 for points):

    area   [0, 0, 2 a/Z, 3 a yg, -3 a xg, 0]
    xg     [-1/Z, 0, xg/Z, xg yg + k n11, -(1 + xg^2 + k n20),  yg]
    yg     [0, -1/Z, yg/Z, 1 + yg^2 + k n02, -(xg yg + k n11), -xg]

The orientation alpha = atan2(2 n11, D) / 2, D = n20 - n02, changes with
alpha' = (n11' D - n11 D') / (D^2 + 4 n11^2). While the plane stays parallel no translation turns
it, a roll turns it by -1, and, with K = 5 for a region and 2 for points, wx and wy turn it by the
following over D^2 + 4 n11^2:

    wx   K (n12 D + n11 (n03 - n21)) + xg (n02 D - 2 n11^2) + yg n11 (n20 + n02)
    wy  -K (n21 D + n11 (n12 - n30)) + xg n11 (n20 + n02) - yg (n20 D + 2 n11^2)

The normalised set a_n = Z* sqrt(a*/a), x_n = a_n xg, y_n = a_n yg has the translation block
-(a_n/Z) I: near the goal each of them is moved by one velocity of the camera.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.control import interaction
from servo_nodes.values import Floats


@dataclass(frozen=True, eq=False)
class Moments:
    """Moments up to the second order.

    Attributes
    ----------
    area : (...), of the region; number of points for a set
    centre : (..., 2), xg, yg
    n20, n11, n02 : (...), centred second moments divided by `area`
    region : bool, whether a dense region was measured, not a set of points
    """

    area: Floats
    centre: Floats
    n20: Floats
    n11: Floats
    n02: Floats
    region: bool

    @property
    def orientation(self) -> Floats:
        """Return the angle (...), rad, of the main axis, in (-pi/2, pi/2]."""
        return 0.5 * np.arctan2(2 * self.n11, self.n20 - self.n02)


def of_polygon(corners: npt.ArrayLike) -> Moments:
    """Return the moments of the region inside polygons (..., N, 2), by Green's theorem."""
    corners = np.asarray(corners, dtype=np.float64)
    x, y = corners[..., 0], corners[..., 1]
    x2, y2 = np.roll(x, -1, axis=-1), np.roll(y, -1, axis=-1)
    cross = x * y2 - x2 * y
    signed = 0.5 * cross.sum(-1)
    xg = (cross * (x + x2)).sum(-1) / (6 * signed)
    yg = (cross * (y + y2)).sum(-1) / (6 * signed)
    m20 = (cross * (x * x + x * x2 + x2 * x2)).sum(-1) / (12 * signed)
    m02 = (cross * (y * y + y * y2 + y2 * y2)).sum(-1) / (12 * signed)
    m11 = (cross * (x * y2 + 2 * (x * y + x2 * y2) + x2 * y)).sum(-1) / (24 * signed)
    return Moments(np.abs(signed), np.stack([xg, yg], axis=-1), m20 - xg * xg, m11 - xg * yg,
                   m02 - yg * yg, True)


def of_points(points_xy: npt.ArrayLike, weights: npt.ArrayLike | None = None) -> Moments:
    """Return the moments of sets of points (..., N, 2), weighted by (..., N)."""
    points_xy = np.asarray(points_xy, dtype=np.float64)
    w = shares(points_xy, weights)
    centre = (w[..., None] * points_xy).sum(-2)
    x, y = np.moveaxis(points_xy - centre[..., None, :], -1, 0)
    count = np.full(points_xy.shape[:-2], float(points_xy.shape[-2]))
    return Moments(count, centre, (w * x * x).sum(-1), (w * x * y).sum(-1), (w * y * y).sum(-1),
                   False)


def thirds_of_polygon(corners: npt.ArrayLike) -> Floats:
    """Return n30, n21, n12, n03, (..., 4), of the region inside polygons (..., N, 2).

    Centred third moments divided by the area. The fan of triangles from the centre to the edges
    reduces each to an integral along the edges, of a cubic, for which Simpson's rule is exact.
    """
    corners = np.asarray(corners, dtype=np.float64)
    start = corners - of_polygon(corners).centre[..., None, :]
    end = np.roll(start, -1, axis=-2)
    cross = start[..., 0] * end[..., 1] - end[..., 0] * start[..., 1]
    along = (_cubes(start) + 4 * _cubes(0.5 * (start + end)) + _cubes(end)) / 6
    total = (cross[..., None] * along).sum(-2) / 5
    return typing.cast(Floats, total / (0.5 * cross.sum(-1, keepdims=True)))


def thirds_of_points(points_xy: npt.ArrayLike, weights: npt.ArrayLike | None = None) -> Floats:
    """Return n30, n21, n12, n03, (..., 4), of sets of points (..., N, 2), weighted by (..., N)."""
    points_xy = np.asarray(points_xy, dtype=np.float64)
    w = shares(points_xy, weights)[..., None]
    centred = points_xy - (w * points_xy).sum(-2, keepdims=True)
    return typing.cast(Floats, (w * _cubes(centred)).sum(-2))


def _cubes(points_xy: Floats) -> Floats:
    """Return x^3, x^2 y, x y^2, y^3, (..., 4)."""
    x, y = points_xy[..., 0], points_xy[..., 1]
    return np.stack([x * x * x, x * x * y, x * y * y, y * y * y], axis=-1)


def shares(points_xy: Floats, weights: npt.ArrayLike | None) -> Floats:
    """Return weights (..., N) that sum to 1 for points (..., N, 2)."""
    if weights is None:
        return np.full(points_xy.shape[:-1], 1.0 / points_xy.shape[-2])
    w = np.asarray(weights, dtype=np.float64)
    return typing.cast(Floats, w / w.sum(-1, keepdims=True))


def spread_determinant(points_xy: Floats, weights: Floats | None = None) -> Floats:
    """Return n20 n02 - n11^2 (...): it scales with the square of any area drawn on the points."""
    found = of_points(points_xy, weights)
    return found.n20 * found.n02 - found.n11 ** 2


def roll_between(goal_xy: Floats, points_xy: Floats, weights: Floats | None = None) -> Floats:
    """Return the angle (...), rad, in (-pi, pi], by which `points_xy` are turned from `goal_xy`.

    It is the angle of the similarity that lays one set (..., N, 2) over the other best.
    """
    w = shares(points_xy, weights)[..., None]
    a = goal_xy - (w * goal_xy).sum(-2, keepdims=True)
    b = points_xy - (w * points_xy).sum(-2, keepdims=True)
    dot = (w * a * b).sum((-1, -2))
    cross = (w[..., 0] * (a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0])).sum(-1)
    return typing.cast(Floats, np.arctan2(cross, dot))


def area_row(found: Moments, depth: npt.ArrayLike) -> Floats:
    """Return the interaction rows (..., 6) of a region's area at `depth` (...), m."""
    if not found.region:
        raise ValueError('area_row: expected the moments of a region, got those of points '
                         '(use spread_row)')
    row = np.zeros((*found.area.shape, 6))
    row[..., 2] = 2 * found.area / np.asarray(depth)
    row[..., 3] = 3 * found.area * found.centre[..., 1]
    row[..., 4] = -3 * found.area * found.centre[..., 0]
    return row


def centre_rows(found: Moments, depth: npt.ArrayLike) -> Floats:
    """Return the interaction rows (..., 2, 6) of the centre at `depth` (...), m."""
    k = 4.0 if found.region else 1.0
    rows = interaction.points(found.centre[..., None, :], np.asarray(depth)[..., None])
    rows[..., 0, 3] += k * found.n11
    rows[..., 0, 4] -= k * found.n20
    rows[..., 1, 3] += k * found.n02
    rows[..., 1, 4] -= k * found.n11
    return rows


def orientation_row(found: Moments, thirds: Floats) -> Floats:
    """Return the interaction rows (..., 6) of `Moments.orientation`.

    Parameters
    ----------
    found : Moments
    thirds : (..., 4), n30, n21, n12, n03 of the same region or points

    A shape without a main axis (a disc, a square) has no orientation: its row is not finite.
    """
    k = 5.0 if found.region else 2.0
    n30, n21, n12, n03 = np.moveaxis(np.asarray(thirds, dtype=np.float64), -1, 0)
    n20, n11, n02 = found.n20, found.n11, found.n02
    xg, yg = found.centre[..., 0], found.centre[..., 1]
    across, trace = n20 - n02, n20 + n02
    row = np.zeros((*n20.shape, 6))
    row[..., 3] = (k * (n12 * across + n11 * (n03 - n21)) + yg * n11 * trace
                   + xg * (n02 * across - 2 * n11 * n11))
    row[..., 4] = (-k * (n21 * across + n11 * (n12 - n30)) + xg * n11 * trace
                   - yg * (n20 * across + 2 * n11 * n11))
    with np.errstate(all='ignore'):
        row[..., 3:5] /= (across * across + 4 * n11 * n11)[..., None]
    row[..., 5] = -1.0
    return row


def spread_row(points_xy: npt.ArrayLike, depth: npt.ArrayLike) -> Floats:
    """Return the rows (..., 6) of the sum of squared distances to the centre, at equal depth."""
    points_xy = np.asarray(points_xy, dtype=np.float64)
    depths = np.broadcast_to(np.asarray(depth)[..., None], points_xy.shape[:-1])
    stack = interaction.points(points_xy, depths)
    centred = points_xy - points_xy.mean(-2, keepdims=True)
    return typing.cast(Floats, 2 * np.einsum('...r,...rk->...k',
                                             centred.reshape(stack.shape[:-1]), stack))


def normalised(found: Moments, goal_area: npt.ArrayLike, goal_depth: npt.ArrayLike) -> Floats:
    """Return (x_n, y_n, a_n), (..., 3), m: the centre and the size as a distance."""
    a_n = np.asarray(goal_depth) * np.sqrt(np.asarray(goal_area) / found.area)
    return np.concatenate([a_n[..., None] * found.centre, a_n[..., None]], axis=-1)


def normalised_rows(found: Moments, depth: npt.ArrayLike, goal_area: npt.ArrayLike,
                    goal_depth: npt.ArrayLike) -> Floats:
    """Return the interaction rows (..., 3, 6) of `normalised` of a region."""
    features = normalised(found, goal_area, goal_depth)
    a_n = features[..., 2]
    size = -0.5 * (a_n / found.area)[..., None] * area_row(found, depth)
    rows = np.empty((*a_n.shape, 3, 6))
    rows[..., :2, :] = (a_n[..., None, None] * centre_rows(found, depth)
                        + found.centre[..., None] * size[..., None, :])
    rows[..., 2, :] = size
    return rows

