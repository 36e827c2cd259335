# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A view made ready for the law: usable points only, and a depth for each of them.

A depth comes from, in this order: the view itself; an observer that watches how the point moves
with the camera; the goal; a constant.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.control import depth, normal, prediction
from servo_nodes.control.law_settings import DepthSettings
from servo_nodes.values import Floats, Stamp, View

Ids = npt.NDArray[np.uint32]


@dataclass(frozen=True, eq=False)
class Goal:
    """The goal's points as columns.

    Attributes
    ----------
    xy : (2, N), normalised
    inverse : (N,), 1/Z, 1/m
    basis : (10, N), of the normal equations
    """

    xy: Floats
    inverse: Floats
    basis: Floats


@dataclass(frozen=True, eq=False)
class Sight:
    """The usable points of one view.

    Attributes
    ----------
    stamp : int, ns
    xy, goal_xy : (N, 2), normalised
    depths, goal_depths : (N,), m, all known
    trust : (N,), 0..1, as the view gives it, none 0
    ids : (N,)
    """

    stamp: Stamp
    xy: Floats
    goal_xy: Floats
    depths: Floats
    goal_depths: Floats
    trust: Floats
    ids: Ids

    def __len__(self) -> int:
        return len(self.trust)

    @functools.cached_property
    def rays(self) -> Floats:
        """Return (x, y, 1, 1/Z), (4, N)."""
        return prediction.homogeneous(self.xy, self.depths)

    @functools.cached_property
    def goal(self) -> Goal:
        """Return the goal's points in the form the live loop needs."""
        rays = prediction.homogeneous(self.goal_xy, self.goal_depths)
        return Goal(rays[:2], rays[3], normal.basis(rays[:2], rays[3], rays[:2]))

    def share_goal(self, other: Sight) -> None:
        """Take over what `other` made of the goal when it is the same."""
        if 'goal' in other.__dict__ and all(
                getattr(self, name).tobytes() == getattr(other, name).tobytes()
                for name in ('goal_xy', 'goal_depths')):
            self.__dict__['goal'] = other.goal


def sight_from_view(view: View, settings: DepthSettings, memory: DepthMemory,
                    before: Sight | None = None) -> Sight:
    """Return what the law can use of `view`; possibly nothing.

    Sums and extremes find out at once that nothing is missing, which is the rule.
    """
    xy, goal_xy, trust, ids = view.points_xy, view.goal_xy, view.weights, view.ids
    depths, goal_depths = view.depths, view.goal_depths
    if not (len(ids) and math.isfinite(
            float(np.add.reduce(xy, None) + np.add.reduce(goal_xy, None)))
            and np.minimum.reduce(trust) > 0):
        usable = np.isfinite(xy).all(-1) & np.isfinite(goal_xy).all(-1) & (trust > 0)
        xy, goal_xy, trust, ids = xy[usable], goal_xy[usable], trust[usable], ids[usable]
        depths, goal_depths = depths[usable], goal_depths[usable]
    if not _all_known(goal_depths):
        known = (goal_depths > 0) & (goal_depths < np.inf)
        goal_depths = np.where(known, goal_depths, settings.fallback)
    if not _all_known(depths):
        known = (depths > 0) & (depths < np.inf)
        guess = memory.depths_of(ids, goal_depths) if settings.observe else goal_depths
        depths = np.where(known, depths, guess)
    sight = Sight(view.stamp, xy, goal_xy, depths, goal_depths, np.minimum(trust, 1.0), ids)
    if before is not None:
        sight.share_goal(before)
    return sight


def _all_known(depths: Floats) -> bool:
    return bool(len(depths) and np.minimum.reduce(depths) > 0
                and np.maximum.reduce(depths) < np.inf)


class DepthMemory:
    """Depth estimates of points by their number, from one view to the next."""

    def __init__(self) -> None:
        self._ids: Ids = np.empty(0, np.uint32)
        self._state = depth.Observed(np.empty((0, 2)), np.empty(0))

    def clear(self) -> None:
        """Forget all estimates."""
        self._ids = np.empty(0, np.uint32)
        self._state = depth.Observed(np.empty((0, 2)), np.empty(0))

    def depths_of(self, ids: Ids, otherwise: Floats) -> Floats:
        """Return estimates (N,), m, of the points `ids`; `otherwise` (N,) where there is none."""
        depths: Floats = np.array(otherwise)
        _, new, old = np.intersect1d(ids, self._ids, return_indices=True)
        depths[new] = self._state.depths[old]
        return depths

    def follow(self, before: Sight, after_xy: Floats, after_ids: Ids, twist: Floats,
               duration: float, settings: DepthSettings) -> None:
        """Take in how points moved since `before` while the camera moved with `twist` (6,).

        Parameters
        ----------
        before : Sight
        after_xy, after_ids : (N, 2), normalised, and (N,)
        twist : (6,), m/s and rad/s, in the optical frame
        duration : float, s
        settings : DepthSettings
        """
        ids, i, j = np.intersect1d(before.ids, after_ids, return_indices=True)
        start_xy = before.xy[i]
        _, new, old = np.intersect1d(ids, self._ids, return_indices=True)
        start_xy[new] = self._state.points_xy[old]
        start = depth.Observed(start_xy, 1 / self.depths_of(ids, before.depths[i]))
        self._state = depth.observed(
            start, before.xy[i], after_xy[j], twist, duration=duration, gain=settings.gain,
            nearest=settings.nearest, farthest=settings.farthest)
        self._ids = ids
