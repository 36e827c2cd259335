# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Image moments of point sets and of regions, and their interaction matrices.

With n_ij = mu_ij / area for a region bounded by a polygon, and the mean of the centred products
for a set of points, on a plane parallel to the image at depth Z (Chaumette 2004; Tahri & Chaumette
2005; formulas from memory, re-derived; k = 4 for a region, 1 for points):

    area   [0, 0, 2 a/Z, 3 a yg, -3 a xg, 0]
    xg     [-1/Z, 0, xg/Z, xg yg + k n11, -(1 + xg^2 + k n20),  yg]
    yg     [0, -1/Z, yg/Z, 1 + yg^2 + k n02, -(xg yg + k n11), -xg]

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

