# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The laws: from points in the image to the twist that brings them home.

The point law drives e = s - s* to zero with xi = -gain M e, where M is built from the interaction
matrix L at the current points and L* at the goal (Chaumette & Hutchinson 2006, from memory):

    current  M = pinv(L)              straight lines in the image; the camera retreats in rolls
    goal     M = pinv(L*)             needs no current depth; the camera advances in rolls
    mean     M = pinv((L + L*) / 2)   a pure roll stays a pure roll (Malis 2004)
    blend    M = (pinv(L) + pinv(L*)) / 2
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.control import interaction
from servo_nodes.settings import Checked, setting
from servo_nodes.values import Floats

KINDS = ('points',)
INTERACTIONS = ('current', 'goal', 'mean', 'blend')


@dataclass(frozen=True)
class LawSettings(Checked):
    """How views become a raw twist."""

    kind: str = setting('points', choices=KINDS, help='which published law turns features into a twist')
    interaction: str = setting(
        'mean', choices=INTERACTIONS,
        help='interaction matrix of the point law: at the current points, at the goal, the mean of '
             'both matrices, or the blend (mean) of both pseudo-inverses')
    gain: float = setting(
        1.5, unit='1/s', low=0.01, high=20.0,
        help='share of the error removed per second; too high overshoots, too low crawls')
    fallback_depth: float = setting(
        0.5, unit='m', low=0.01, high=100.0,
        help='depth of points whose depth is known neither now nor in the goal')


@dataclass(frozen=True, eq=False)
class Solved:
    """Twists and what the stack they came from is worth.

    Attributes
    ----------
    twist : (..., 6), m/s and rad/s, camera in its optical frame
    smallest, largest : (...), singular values of the (weighted) stack that was inverted
    """

    twist: Floats
    smallest: Floats
    largest: Floats

    @property
    def condition(self) -> Floats:
        """Return largest / smallest, inf for a stack without full rank."""
        with np.errstate(divide='ignore', invalid='ignore'):
            return np.where(self.smallest > 0, self.largest / self.smallest, np.inf)


def twists(points_xy: npt.ArrayLike, goal_xy: npt.ArrayLike, depths: npt.ArrayLike,
           goal_depths: npt.ArrayLike, settings: LawSettings, *,
           weights: npt.ArrayLike | None = None) -> Floats:
    """Return the raw twists (..., 6) of the law; see `solved` for the arguments."""
    return solved(points_xy, goal_xy, depths, goal_depths, settings, weights=weights).twist


def solved(points_xy: npt.ArrayLike, goal_xy: npt.ArrayLike, depths: npt.ArrayLike,
           goal_depths: npt.ArrayLike, settings: LawSettings, *,
           weights: npt.ArrayLike | None = None) -> Solved:
    """Return the raw twists of the law and what the view is worth.

    Parameters
    ----------
    points_xy, goal_xy : (..., N, 2), normalised image coordinates now and in the goal
    depths, goal_depths : (..., N), m, all known
    settings : LawSettings
    weights : (..., N), trust in each point, 0..1; None trusts all
    """
    points_xy, goal_xy = np.asarray(points_xy), np.asarray(goal_xy)
    error = (points_xy - goal_xy).reshape(*points_xy.shape[:-2], -1, 1)
    here = there = np.empty(0)
    if settings.interaction != 'goal':
        here = interaction.points(points_xy, depths)
    if settings.interaction != 'current':
        there = np.broadcast_to(interaction.points(goal_xy, goal_depths), (*error.shape[:-1], 6))
    if weights is not None:
        rows = np.repeat(np.asarray(weights, dtype=np.float64), 2, axis=-1)[..., None]
        error, here, there = (error * rows, here * rows if here.size else here,
                              there * rows if there.size else there)
    if settings.interaction == 'blend':
        a, b = _least_squares(here, error), _least_squares(there, error)
        return Solved(-0.5 * settings.gain * (a[0] + b[0]), np.minimum(a[1], b[1]),
                      np.maximum(a[2], b[2]))
    stack = {'current': here, 'goal': there}.get(settings.interaction)
    if stack is None:
        stack = 0.5 * (here + there)
    twist, smallest, largest = _least_squares(stack, error)
    return Solved(-settings.gain * twist, smallest, largest)


def _least_squares(stack: Floats, error: Floats) -> tuple[Floats, Floats, Floats]:
    u, s, vt = np.linalg.svd(stack, full_matrices=False)
    keep = s > 1e-12 * s[..., :1]
    inverse = np.where(keep, 1.0 / np.where(keep, s, 1.0), 0.0)
    twist = np.swapaxes(vt, -1, -2) @ (inverse[..., None] * (np.swapaxes(u, -1, -2) @ error))
    smallest = s[..., -1] if s.shape[-1] == 6 else np.zeros(s.shape[:-1])
    return twist[..., 0], smallest, s[..., 0]
