# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The laws: from points in the image to the twist that brings them home.

`points` drives e = s - s* to zero with xi = -gain M e, where M is built from the interaction
matrix L at the current points and L* at the goal (Chaumette & Hutchinson 2006, from memory):

    current  M = pinv(L)              straight lines in the image; the camera retreats in rolls
    goal     M = pinv(L*)             needs no current depth; the camera advances in rolls
    mean     M = pinv((L + L*) / 2)   a pure roll stays a pure roll (Malis 2004)
    blend    M = (pinv(L) + pinv(L*)) / 2

`polar` does the same with (rho, alpha) of each point, where a roll about the middle of the image
is one and the same angle for all. `partitioned`, `hybrid` and `pose` have modules of their own.
Weights enter as xi = -gain (D L)^+ D e. Everything broadcasts over leading axes.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.optimize import lsq_linear

from servo_nodes.control import (
    hybrid,
    interaction,
    least_squares,
    moments,
    partitioned,
    pose,
    two_views,
)
from servo_nodes.control.law_settings import STACKED
from servo_nodes.control.law_settings import LawSettings as LawSettings
from servo_nodes.values import Floats


def stacks_of(points_xy: Floats, goal_xy: Floats, depths: Floats, goal_depths: Floats,
              settings: LawSettings) -> tuple[Floats, ...]:
    """Return the matrices (..., 2N, 6) that are inverted: one, or two to blend."""
    matrix = interaction.polar if settings.kind == 'polar' else interaction.points
    if settings.interaction == 'goal':
        return (matrix(goal_xy, goal_depths),)
    here = matrix(points_xy, depths)
    if settings.interaction == 'current':
        return (here,)
    there = matrix(goal_xy, goal_depths)
    return (here, there) if settings.interaction == 'blend' else (0.5 * (here + there),)


def _polar_error(points_xy: Floats, goal_xy: Floats) -> Floats:
    """Return (rho - rho*, rho (alpha - alpha*)), with the angle the short way round."""
    now, then = interaction.polar_coordinates(points_xy), interaction.polar_coordinates(goal_xy)
    error = now - then
    turned = np.pi - np.remainder(np.pi - error[..., 1], 2 * np.pi)
    error[..., 1] = now[..., 0] * turned
    return error


def twists(points_xy: npt.ArrayLike, goal_xy: npt.ArrayLike, depths: npt.ArrayLike,
           goal_depths: npt.ArrayLike, settings: LawSettings, *,
           weights: npt.ArrayLike | None = None, gain: npt.ArrayLike | None = None) -> Floats:
    """Return the raw twists (..., 6) of the law.

    Parameters
    ----------
    points_xy, goal_xy : (..., N, 2), normalised image coordinates now and in the goal
    depths, goal_depths : (..., N), m, all known
    settings : LawSettings
    weights : (..., N), trust in each point, 0..1; None trusts all
    gain : (...), 1/s; None takes `settings.gain`

    Points at or behind the camera, or too few points for the law, give a twist that is not finite
    or of minimum norm: the gate has the last word.
    """
    points_xy, goal_xy = np.asarray(points_xy, np.float64), np.asarray(goal_xy, np.float64)
    depths, goal_depths = np.asarray(depths, np.float64), np.asarray(goal_depths, np.float64)
    trust = None if weights is None else np.asarray(weights, np.float64)
    factor = np.asarray(settings.gain if gain is None else gain, np.float64)[..., None]
    if settings.kind in STACKED:
        polar = settings.kind == 'polar'
        error = _polar_error(points_xy, goal_xy) if polar else points_xy - goal_xy
        stacks = stacks_of(points_xy, goal_xy, depths, goal_depths, settings)
        return _from_stacks(stacks, error, settings, trust, factor)
    return factor * _from_pose_or_parts(points_xy, goal_xy, depths, goal_depths, settings, trust)


def _from_stacks(stacks: tuple[Floats, ...], error: Floats, settings: LawSettings,
                 weights: Floats | None, factor: Floats) -> Floats:
    """Return the mean of the twists (..., 6) that each stack (..., 2N, 6) gives."""
    error = error.reshape(*error.shape[:-2], -1)
    if weights is not None:
        scale = np.repeat(weights, 2, axis=-1)
        error, stacks = error * scale, tuple(stack * scale[..., None] for stack in stacks)
    if settings.solver == 'box':
        twist = [_box(stack, factor * error, settings) for stack in stacks]
    else:
        damping = settings.damping.factors
        twist = [-factor * _fits_of_axes(stack, error, settings, damping) for stack in stacks]
    return twist[0] if len(twist) == 1 else 0.5 * (twist[0] + twist[1])


def _fits_of_axes(stack: Floats, error: Floats, settings: LawSettings,
                  damping: least_squares.Damping) -> Floats:
    axes = settings.axes
    if len(axes) == 6:
        return least_squares.fits(stack, error, damping)
    part = least_squares.fits(stack[..., axes], error, damping)
    twist = np.zeros((*part.shape[:-1], 6))
    twist[..., axes] = part
    return twist


def _box(stack: Floats, push: Floats, settings: LawSettings) -> Floats:
    """Return the twists within the box whose image motion is nearest to -push (..., 2N)."""
    axes = settings.axes
    limit = np.repeat([settings.box_linear, settings.box_angular], 3)[list(axes)]
    lead = np.broadcast_shapes(stack.shape[:-2], push.shape[:-1])
    flat = np.broadcast_to(stack, (*lead, *stack.shape[-2:])).reshape(-1, *stack.shape[-2:])
    pushes = np.broadcast_to(push, (*lead, push.shape[-1])).reshape(-1, push.shape[-1])
    twist = np.zeros((len(flat), 6))
    for one, matrix, right in zip(twist, flat, pushes, strict=True):
        if np.isfinite(matrix).all() and np.isfinite(right).all():
            one[list(axes)] = lsq_linear(matrix[:, axes], -right, (-limit, limit), 'bvls').x
        else:
            one[:] = np.nan
    return twist.reshape(*lead, 6)


def _from_pose_or_parts(points_xy: Floats, goal_xy: Floats, depths: Floats, goal_depths: Floats,
                        settings: LawSettings, weights: Floats | None) -> Floats:
    if settings.kind == 'partitioned':
        return partitioned.twists(points_xy, goal_xy, depths, weights, settings.damping.factors)
    T_GC = poses(points_xy, goal_xy, depths, goal_depths, settings, weights)
    if settings.kind == 'pose':
        return pose.twists(T_GC)
    share = moments.shares(points_xy, weights)[..., None]
    return hybrid.twists(T_GC, (share * pose.structure(goal_xy, goal_depths)).sum(-2))


def poses(points_xy: Floats, goal_xy: Floats, depths: Floats, goal_depths: Floats,
          settings: LawSettings, weights: Floats | None = None) -> Floats:
    """Return T_GC (..., 4, 4), the camera in the goal's camera frame, from `settings.source`."""
    if settings.source == 'structure':
        return pose.relative(points_xy, goal_xy, depths, goal_depths, weights)
    route = {'homography': two_views.pose_from_homography,
             'essential': two_views.pose_from_essential}[settings.source]
    return route(points_xy, goal_xy, goal_depths, weights)
