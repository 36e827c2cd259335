# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The pose law, and the relative pose it and others rest on.

`T_GC` is the pose of the camera now (C) in the camera frame of the goal view (G): with
T_GC = (R, t) and R = exp(theta u),

    v = -gain R^T t,   w = -gain theta u

drives both to zero exponentially, the camera along a straight line (Chaumette & Hutchinson 2006,
from memory). The points may leave the image on the way.

The pose comes from the goal view's points and depths. Where depths are known now as well, the two
clouds are laid over each other (weighted, by singular values: Kabsch 1976, from memory), which
needs no start; then the reprojection error is minimised by Gauss-Newton steps in which the
interaction matrix is the Jacobian, so that the pose does not inherit what the current depths get
wrong.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.control import interaction, least_squares
from servo_nodes.values import Floats

LEAST_POINTS = 3
_ROUNDS = 6
_CLOSED = 1e-12


def twists(T_GC: npt.ArrayLike) -> Floats:
    """Return the twists (..., 6) of the pose law at gain 1 for poses (..., 4, 4) in the goal."""
    T_GC = np.asarray(T_GC, dtype=np.float64)
    rotation = T_GC[..., :3, :3]
    v = -np.einsum('...ji,...j->...i', rotation, T_GC[..., :3, 3])
    return np.concatenate([v, -motion.vector_from_rotation(rotation)], axis=-1)


def structure(points_xy: npt.ArrayLike, depths: npt.ArrayLike) -> Floats:
    """Return points (..., N, 3), m in the optical frame, of image points and their depths."""
    points_xy = np.asarray(points_xy, dtype=np.float64)
    depths = np.asarray(depths, dtype=np.float64)[..., None]
    scaled = points_xy * depths
    return np.concatenate([scaled, np.broadcast_to(depths, (*scaled.shape[:-1], 1))], axis=-1)


def image(T_CG: Floats, points_G: Floats) -> tuple[Floats, Floats]:
    """Return image points (..., N, 2) and depths (..., N) at C of points (..., N, 3), m in G."""
    points_C = (points_G @ np.swapaxes(T_CG[..., :3, :3], -1, -2) + T_CG[..., None, :3, 3])
    depths = points_C[..., 2]
    with np.errstate(divide='ignore', invalid='ignore'):
        return points_C[..., :2] / depths[..., None], depths


def laid_over(points_G: Floats, points_C: Floats, weights: Floats | None = None) -> Floats:
    """Return T_CG (..., 4, 4) that takes points (..., N, 3) in G best to those in C."""
    w = np.ones(points_C.shape[:-1]) if weights is None else weights
    w = (w / w.sum(-1, keepdims=True))[..., None]
    centre_G, centre_C = (w * points_G).sum(-2), (w * points_C).sum(-2)
    spread = np.swapaxes(points_C - centre_C[..., None, :], -1, -2) @ (
        w * (points_G - centre_G[..., None, :]))
    finite = np.isfinite(spread).all((-1, -2), keepdims=True)
    u, _, vt = np.linalg.svd(np.where(finite, spread, np.eye(3)))
    u[..., 2] *= np.sign(np.linalg.det(u @ vt))[..., None]
    rotation = np.where(finite, u @ vt, np.nan)
    shift = centre_C - np.einsum('...ij,...j->...i', rotation, centre_G)
    return motion.pose_from_parts(rotation, shift)


def refined(T_CG: Floats, points_G: Floats, points_xy: Floats,
            weights: Floats | None = None) -> Floats:
    """Return T_CG (..., 4, 4) after Gauss-Newton steps on the error of reprojection."""
    for _ in range(_ROUNDS):
        seen_xy, depths = image(T_CG, points_G)
        stack = interaction.points(seen_xy, depths)
        left = (points_xy - seen_xy).reshape(*stack.shape[:-1])
        if weights is not None:
            rows = np.repeat(weights, 2, axis=-1)
            stack, left = stack * rows[..., None], left * rows
        step = least_squares.fits(stack, left)
        if not np.nanmax(np.abs(step), initial=0.0) > _CLOSED:
            break
        T_CG = motion.exp(-step) @ T_CG
    return T_CG


def relative(points_xy: npt.ArrayLike, goal_xy: npt.ArrayLike, depths: npt.ArrayLike,
             goal_depths: npt.ArrayLike, weights: Floats | None = None) -> Floats:
    """Return T_GC (..., 4, 4), the pose of the camera in the goal's camera frame.

    Parameters
    ----------
    points_xy, goal_xy : (..., N, 2), normalised
    depths, goal_depths : (..., N), m; `depths` only start the search
    weights : (..., N), 0..1

    Fewer than `LEAST_POINTS` points give NaN.
    """
    points_xy = np.asarray(points_xy, dtype=np.float64)
    points_G = structure(goal_xy, goal_depths)
    if points_xy.shape[-2] < LEAST_POINTS:
        return np.full((*points_xy.shape[:-2], 4, 4), np.nan)
    T_CG = laid_over(points_G, structure(points_xy, depths), weights)
    return motion.inverse(refined(T_CG, points_G, points_xy, weights))
