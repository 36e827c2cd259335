# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The partitioned law: what moves along and about the optical axis is measured apart.

Corke & Hutchinson 2001 (from memory) take the advance from the size sigma of the pattern in the
image and the roll from an angle alpha in it, because in the point law both disturb each other (the
camera retreats in rolls):

    v_z = gain ln(sigma* / sigma),   w_z = gain (alpha - alpha*),   d alpha/dt = -w_z in a roll,
    (v_x, v_y, w_x, w_y) = L_xy^+ (-gain e - L_z (v_z, w_z)).

They take sigma from the area of a polygon and alpha from a segment. We take both from all points:
sigma^4 is the determinant of the points' second moments, which scales with any area, and alpha -
alpha* the angle of the similarity that lays the goal's points best over the current ones. No order
of the points is needed and none counts more than another.
"""

from __future__ import annotations

import typing

import numpy as np

from servo_nodes.control import interaction, least_squares, moments
from servo_nodes.values import Floats

_Z = (2, 5)
_XY = (0, 1, 3, 4)


def twists(points_xy: Floats, goal_xy: Floats, depths: Floats, weights: Floats | None = None,
           damping: least_squares.Damping = least_squares.NO_DAMPING) -> Floats:
    """Return the twists (..., 6) of the partitioned law at gain 1.

    Parameters
    ----------
    points_xy, goal_xy : (..., N, 2), normalised
    depths : (..., N), m
    weights : (..., N), 0..1

    Points on a line, or fewer than three, have no size: the twist is not finite.
    """
    goal_xy = np.broadcast_to(goal_xy, points_xy.shape)
    along = _along_the_axis(points_xy, goal_xy, weights)
    stack = interaction.points(points_xy, depths)
    right = (goal_xy - points_xy).reshape(stack.shape[:-1]) - (
        stack[..., _Z] @ along[..., None])[..., 0]
    if weights is not None:
        rows = np.repeat(np.broadcast_to(weights, points_xy.shape[:-1]), 2, axis=-1)
        stack, right = stack * rows[..., None], right * rows
    twist = np.empty((*points_xy.shape[:-2], 6))
    twist[..., _Z] = along
    twist[..., _XY] = least_squares.fits(stack[..., _XY], right, damping)
    return twist


def _along_the_axis(points_xy: Floats, goal_xy: Floats, weights: Floats | None) -> Floats:
    """Return (v_z, w_z), (..., 2), at gain 1."""
    with np.errstate(divide='ignore', invalid='ignore'):
        advance = 0.25 * np.log(moments.spread_determinant(goal_xy, weights)
                                / moments.spread_determinant(points_xy, weights))
    roll = moments.roll_between(goal_xy, points_xy, weights)
    return typing.cast(Floats, np.stack([advance, roll], axis=-1))
