# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Two views of the same points: homography, essential matrix, and the motion in them.

For points X_C = R X_G + t of the goal view (G) seen now (C):

    on a plane n.X_G = d   x_C ~ H x_G,  H = R + t n^T / d       (four points; Faugeras & Lustman
    1988) anywhere               x_C^T E x_G = 0,  E = [t] R           (eight points;
    Longuet-Higgins 1981)

Both are found linearly with coordinates centred and scaled (Hartley 1997) and taken apart in
closed form (Ma, Soatto, Kosecka & Sastry, An Invitation to 3-D Vision, 2004, ch. 5; all from
memory). A homography leaves two motions that keep the plane before the camera: the goal's own
depths tell which. An essential matrix leaves the length of t open: the goal's depths give it.
Everything broadcasts.
"""

from __future__ import annotations

import typing

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.values import Floats

LEAST_POINTS_PLANE = 4
LEAST_POINTS_RELIEF = 8
_PURE_ROTATION = 1e-9


def homography(points_xy: Floats, goal_xy: Floats, weights: Floats | None = None) -> Floats:
    """Return H (..., 3, 3) that takes goal points (..., N, 2) to current ones.

    Its middle singular value is 1, its sign the one with positive depths.
    """
    a, T_a = _scaled(goal_xy)
    b, T_b = _scaled(points_xy)
    zero = np.zeros_like(a)
    rows = np.concatenate([
        np.concatenate([a, zero, -b[..., :1] * a], axis=-1),
        np.concatenate([zero, a, -b[..., 1:2] * a], axis=-1)], axis=-2)
    solved = _null_vector(rows, weights, 2).reshape(*rows.shape[:-2], 3, 3)
    matrix = np.linalg.solve(T_b, solved @ T_a)
    matrix = matrix / np.linalg.svd(matrix, compute_uv=False)[..., 1, None, None]
    depth = np.einsum('...j,...nj->...n', matrix[..., 2, :], _homogeneous(goal_xy)).sum(-1)
    return typing.cast(Floats, matrix * np.sign(depth)[..., None, None])


def essential(points_xy: Floats, goal_xy: Floats, weights: Floats | None = None) -> Floats:
    """Return E (..., 3, 3) with singular values 1, 1, 0 from at least eight points (..., N, 2)."""
    a, T_a = _scaled(goal_xy)
    b, T_b = _scaled(points_xy)
    rows = (b[..., :, None] * a[..., None, :]).reshape(*a.shape[:-1], 9)
    solved = _null_vector(rows, weights, 1).reshape(*rows.shape[:-2], 3, 3)
    u, _, vt = np.linalg.svd(np.swapaxes(T_b, -1, -2) @ solved @ T_a)
    matrix: Floats = u[..., :, :2] @ vt[..., :2, :]
    return matrix


def _homogeneous(points_xy: Floats) -> Floats:
    return np.concatenate([points_xy, np.ones((*points_xy.shape[:-1], 1))], axis=-1)


def _scaled(points_xy: Floats) -> tuple[Floats, Floats]:
    """Return homogeneous points of mean 0 and mean length sqrt 2, and what made them."""
    centre = points_xy.mean(-2, keepdims=True)
    length = np.linalg.norm(points_xy - centre, axis=-1).mean(-1)
    factor = np.sqrt(2.0) / np.maximum(length, 1e-12)
    matrix = np.zeros((*factor.shape, 3, 3))
    matrix[..., 0, 0] = matrix[..., 1, 1] = factor
    matrix[..., :2, 2] = -factor[..., None] * centre[..., 0, :]
    matrix[..., 2, 2] = 1.0
    return _homogeneous((points_xy - centre) * factor[..., None, None]), matrix


def _null_vector(rows: Floats, weights: Floats | None, repeats: int) -> Floats:
    """Return the unit vectors (..., 9) that rows (..., M, 9) take nearest to zero."""
    if weights is not None:
        rows = rows * np.concatenate([weights] * repeats, axis=-1)[..., None]
    _, _, vt = np.linalg.svd(rows, full_matrices=True)
    return typing.cast(Floats, vt[..., -1, :])


def motions_from_homography(matrix: npt.ArrayLike) -> tuple[Floats, Floats, Floats]:
    """Return the four motions in H: R (..., 4, 3, 3), t / d (..., 4, 3) and n (..., 4, 3).

    `matrix` (..., 3, 3) has the middle singular value 1 and positive depths, as `homography` gives
    it. A pure rotation gives it four times, with t = 0 and n along the optical axis.
    """
    H = np.asarray(matrix, dtype=np.float64)
    _, s, vt = np.linalg.svd(H)
    v1, v2, v3 = vt[..., 0, :], vt[..., 1, :], vt[..., 2, :]
    first, last = np.maximum(s[..., 0] ** 2 - 1, 0.0), np.maximum(1 - s[..., 2] ** 2, 0.0)
    whole = first + last
    still = whole < _PURE_ROTATION
    root = np.sqrt(np.where(still, 1.0, whole))[..., None]
    a, b = np.sqrt(last)[..., None] * v1 / root, np.sqrt(first)[..., None] * v3 / root
    found = [_motion_of_plane(H, v2, u) for u in (a + b, a - b)]
    rotation = np.stack([found[0][0], found[0][0], found[1][0], found[1][0]], axis=-3)
    normal = np.stack([found[0][2], -found[0][2], found[1][2], -found[1][2]], axis=-2)
    shift = np.stack([found[0][1], -found[0][1], found[1][1], -found[1][1]], axis=-2)
    still = still[..., None, None]
    rotation = np.where(still[..., None], _nearest_rotation(H)[..., None, :, :], rotation)
    return (rotation, np.where(still, 0.0, shift), np.where(still, (0.0, 0.0, 1.0), normal))


def _motion_of_plane(H: Floats, v2: Floats, u: Floats) -> tuple[Floats, Floats, Floats]:
    """Return R, t / d, n when the plane holds the directions v2 and u, whose lengths H keeps."""
    before = np.stack([v2, u, np.cross(v2, u)], axis=-1)
    p, q = np.einsum('...ij,...j->...i', H, v2), np.einsum('...ij,...j->...i', H, u)
    after = np.stack([p, q, np.cross(p, q)], axis=-1)
    rotation = after @ np.swapaxes(before, -1, -2)
    normal = before[..., 2]
    return rotation, np.einsum('...ij,...j->...i', H - rotation, normal), normal


def _nearest_rotation(matrix: Floats) -> Floats:
    u, _, vt = np.linalg.svd(matrix)
    u[..., 2] *= np.sign(np.linalg.det(u @ vt))[..., None]
    return typing.cast(Floats, u @ vt)


def plane_of_goal(goal_xy: Floats, goal_depths: Floats) -> Floats:
    """Return n / d (..., 3), 1/m, of the plane of the goal's points: 1/Z = (n/d).(x, y, 1)."""
    rays = _homogeneous(goal_xy)
    plane = np.einsum('...kn,...n->...k', np.linalg.pinv(rays), 1 / goal_depths)
    return typing.cast(Floats, plane)


def pose_from_homography(points_xy: Floats, goal_xy: Floats, goal_depths: Floats,
                         weights: Floats | None = None) -> Floats:
    """Return T_GC (..., 4, 4) of coplanar points; NaN with fewer than four."""
    if points_xy.shape[-2] < LEAST_POINTS_PLANE:
        return np.full((*points_xy.shape[:-2], 4, 4), np.nan)
    goal_xy = np.broadcast_to(goal_xy, points_xy.shape)
    plane = plane_of_goal(goal_xy, np.broadcast_to(goal_depths, points_xy.shape[:-1]))
    distance = 1 / np.linalg.norm(plane, axis=-1, keepdims=True)
    rotation, shift, normal = motions_from_homography(homography(points_xy, goal_xy, weights))
    likeness = np.einsum('...kj,...j->...k', normal, plane * distance)
    best = np.argmax(likeness, axis=-1)[..., None]
    rotation = np.take_along_axis(rotation, best[..., None, None], axis=-3)[..., 0, :, :]
    shift = np.take_along_axis(shift, best[..., None], axis=-2)[..., 0, :]
    return motion.inverse(motion.pose_from_parts(rotation, shift * distance))


def motions_from_essential(matrix: npt.ArrayLike) -> tuple[Floats, Floats]:
    """Return the four motions in E (..., 3, 3): R (..., 4, 3, 3) and unit t (..., 4, 3)."""
    u, _, vt = np.linalg.svd(np.asarray(matrix, dtype=np.float64))
    u = u * np.linalg.det(u)[..., None, None]
    vt = vt * np.linalg.det(vt)[..., None, None]
    quarter = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    one, two = u @ quarter @ vt, u @ quarter.T @ vt
    t = u[..., :, 2]
    return np.stack([one, one, two, two], axis=-3), np.stack([t, -t, t, -t], axis=-2)


def pose_from_essential(points_xy: Floats, goal_xy: Floats, goal_depths: Floats,
                        weights: Floats | None = None) -> Floats:
    """Return T_GC (..., 4, 4) of points in relief; NaN with fewer than eight.

    Of the four motions the one is taken that agrees best with the goal's structure, whose depths
    also give the length of t: x_C x (R X_G + l t) = 0 is linear in l.
    """
    if points_xy.shape[-2] < LEAST_POINTS_RELIEF:
        return np.full((*points_xy.shape[:-2], 4, 4), np.nan)
    goal_xy = np.broadcast_to(goal_xy, points_xy.shape)
    rotations, units = motions_from_essential(essential(points_xy, goal_xy, weights))
    points_G = _homogeneous(goal_xy) * np.asarray(goal_depths)[..., None]
    rays = _homogeneous(points_xy)[..., None, :, :]
    turned = points_G[..., None, :, :] @ np.swapaxes(rotations, -1, -2)
    fixed, moving = np.cross(rays, turned), np.cross(rays, units[..., None, :])
    length = -(fixed * moving).sum((-1, -2)) / (moving * moving).sum((-1, -2))
    left = ((fixed + length[..., None, None] * moving) ** 2).sum((-1, -2))
    behind = ((turned + (length[..., None] * units)[..., None, :])[..., 2] <= 0).any(-1)
    best = np.argmin(np.where(behind, np.inf, left), axis=-1)[..., None]
    rotation = np.take_along_axis(rotations, best[..., None, None], axis=-3)[..., 0, :, :]
    shift = np.take_along_axis(length[..., None] * units, best[..., None], axis=-2)[..., 0, :]
    return motion.inverse(motion.pose_from_parts(rotation, shift))
