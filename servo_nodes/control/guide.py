# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Whether the law heads for the goal directly, along a planned path, or not at all.

Where the camera is rolled far from the goal no interaction matrix helps: with `current` it
retreats, to infinity at 180 degrees; with `goal` it advances and meets the target's plane from 1 +
pi/2 = 147.3 degrees on; `mean` loses rank and `blend` its speed at 180. Such starts are refused
unless a path is planned.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from servo_nodes.control import moments, normal, path, pose
from servo_nodes.control.law import poses
from servo_nodes.control.law_settings import LawSettings
from servo_nodes.control.sight import Sight
from servo_nodes.values import SECOND_NS, Floats, Stamp

GOAL_ROLL_LIMIT = math.radians(140.0)
ROLL_LIMIT = math.radians(172.0)
_LONGEST_TICK = 0.05


@dataclass(frozen=True, eq=False)
class Lead:
    """Where the law is to bring the points now.

    Attributes
    ----------
    goal_xy : (2, N), normalised
    goal_inverse : (N,), 1/Z, 1/m
    basis : (10, N), of the normal equations there
    twist : (6,), of the path itself, to be added to the law's; None without a path
    left : float, share of the path to go; 0 without a path
    refusal : str, why the law must not run from here; empty when it may
    """

    goal_xy: Floats
    goal_inverse: Floats
    basis: Floats
    twist: Floats | None = None
    left: float = 0.0
    refusal: str = ''


class Guide:
    """Judges the start and plans there, then leads, waiting for a camera that lags behind."""

    def __init__(self) -> None:
        self._pending = self._begun = False
        self._path: path.Path | None = None
        self._left = 0.0
        self._last: Stamp = 0
        self._refusal = ''
        self._direct: tuple[Sight, Lead] | None = None

    @property
    def is_idle(self) -> bool:
        """Whether nothing has begun: views are judged as if each were a start."""
        return not self._begun

    def clear(self) -> None:
        """Lead nobody."""
        self._begun = False
        self._go_direct()

    def _go_direct(self) -> None:
        self._pending, self._path, self._left, self._refusal = False, None, 0.0, ''
        self._direct = None

    def begin(self) -> None:
        """Judge the start with the next view, and plan."""
        self._go_direct()
        self._pending = self._begun = True

    def lead(self, xy: Floats, inverse: Floats, sight: Sight, now: Stamp, settings: LawSettings,
             focal_px: float) -> Lead:
        """Return where the points are to be brought.

        Parameters
        ----------
        xy, inverse : (2, N), normalised, and (N,), 1/m: the points and 1/Z at `now`
        sight : Sight, the view they come from
        now : int, ns
        settings : LawSettings
        focal_px : float, px
        """
        if self._pending:
            self._pending = False
            self._plan(xy.T, 1 / inverse, sight, settings)
            self._last = now
        if self._path is None:
            if self._direct is None or self._direct[0] is not sight:
                if not self._begun:
                    self._refusal = _refused(_roll(xy.T, sight), settings)
                goal = sight.goal
                lead = Lead(goal.xy, goal.inverse, goal.basis, refusal=self._refusal)
                self._direct = sight, lead
            return self._direct[1]
        return self._along(self._path, xy, sight, now, settings, focal_px)

    def _along(self, way: path.Path, xy: Floats, sight: Sight, now: Stamp, settings: LawSettings,
               focal_px: float) -> Lead:
        """Return the lead on the way, and go on; wait when the camera lags behind."""
        points_G = pose.structure(sight.goal_xy, sight.goal_depths)
        goal_xy, goal_depths = way.points(self._left, points_G)
        goal_xy, goal_inverse = np.ascontiguousarray(goal_xy.T), 1 / goal_depths
        away = xy - goal_xy
        lag_px = focal_px * math.sqrt(float((away * away).sum()) / away.shape[1])
        rate = float(way.rates(self._left, gain=settings.gain, linear=settings.path.linear,
                               angular=settings.path.angular))
        rate *= max(0.0, 1.0 - lag_px / settings.path.slack_px)
        lead = Lead(goal_xy, goal_inverse, normal.basis(goal_xy, goal_inverse, goal_xy),
                    way.twists(self._left, rate), self._left)
        elapsed = min(max(now - self._last, 0) / SECOND_NS, _LONGEST_TICK)
        self._last = now
        self._left -= rate * elapsed
        if self._left < path.ARRIVED:
            self._go_direct()
        return lead

    def _plan(self, xy: Floats, depths: Floats, sight: Sight, settings: LawSettings) -> None:
        roll = _roll(xy, sight)
        if not _plans(roll, settings):
            self._refusal = _refused(roll, settings)
            return
        T_GC = poses(xy, sight.goal_xy, depths, sight.goal_depths, settings, sight.trust)
        if np.isfinite(T_GC).all():
            self._path, self._left = path.planned(T_GC), 1.0
        else:
            self._refusal = ('law.path: expected enough points for a pose to plan from, got '
                             f'{len(sight)}')


def _roll(xy: Floats, sight: Sight) -> float:
    """Return the angle, rad, without sign, by which the points (N, 2) are turned in the image."""
    return abs(float(moments.roll_between(sight.goal_xy, xy)))


def _plans(roll: float, settings: LawSettings) -> bool:
    mode = settings.path.mode
    return mode == 'planned' or (mode == 'auto' and roll > settings.path.roll)


def _refused(roll: float, settings: LawSettings) -> str:
    """Return why no interaction matrix masters this roll, or nothing."""
    limit = GOAL_ROLL_LIMIT if settings.interaction == 'goal' else ROLL_LIMIT
    if settings.kind != 'points' or roll <= limit or _plans(roll, settings):
        return ''
    return (f'law.interaction {settings.interaction!r}: expected a roll of at most '
            f'{math.degrees(limit):.0f} degrees at the start, got {math.degrees(roll):.0f}; set '
            'law.path.mode to auto or planned')
