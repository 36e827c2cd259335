# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""From views to the raw twist, with the memory that needs: latest view, camera, commanded twists."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.control.law import LawSettings, solved
from servo_nodes.values import Floats, Stamp, View


@dataclass(frozen=True, eq=False)
class Solution:
    """What the law asks for now, and what it rests on.

    Attributes
    ----------
    twist : (6,), raw twist of the camera in its optical frame, before the gate
    error_px : float, root of the weighted mean square of the points' distances to the goal, px
    condition, smallest : float, of the weighted stack that was inverted; inf and 0 without full rank
    points : int, number of points with weight
    scatter : (6,), standard deviation of the camera pose for 1 px of noise per coordinate, m and rad
    points_xy : (N, 2), the points the twist was computed at (predicted to now)
    view_stamp : int, ns, stamp of the view it rests on
    """

    twist: Floats
    error_px: float
    condition: float
    smallest: float
    points: int
    scatter: Floats
    points_xy: Floats
    view_stamp: Stamp


class Servo:
    """Turns views into raw twists; keeps the latest view and what it needs to read it."""

    def __init__(self, settings: LawSettings) -> None:
        self.settings = settings
        self._camera: Camera | None = None
        self._view: View | None = None

    def calibrate(self, camera: Camera) -> None:
        """Take the camera that the views are measured with."""
        self._camera = camera

    def reset(self) -> None:
        """Forget views and motion; the calibration stays."""
        self._view = None

    def begin(self, now: Stamp) -> None:
        """Start from rest: the loop was engaged at `now`, ns."""

    def observe(self, view: View) -> None:
        """Keep `view` as the latest one."""
        self._view = view

    def record(self, twist: Floats, now: Stamp) -> None:
        """Take note that `twist` (6,), in the optical frame, was really sent at `now`, ns."""

    def solve(self, now: Stamp) -> Solution | None:
        """Return what the law asks for at `now`, ns; None without a camera or a usable point."""
        view, camera = self._view, self._camera
        if view is None or camera is None:
            return None
        usable = (np.isfinite(view.points_xy).all(-1) & np.isfinite(view.goal_xy).all(-1)
                  & (view.weights > 0))
        count = int(usable.sum())
        if not count:
            return None
        xy, goal_xy, weights = view.points_xy[usable], view.goal_xy[usable], view.weights[usable]
        depths, goal_depths = self._known_depths(view.depths[usable], view.goal_depths[usable])
        answer = solved(xy, goal_xy, depths, goal_depths, self.settings, weights=weights)
        focal = 0.5 * (camera.fx + camera.fy)
        square = ((xy - goal_xy) ** 2).sum(-1)
        error_px = focal * float(np.sqrt((weights * square).sum() / weights.sum()))
        return Solution(answer.twist, error_px, float(answer.condition), float(answer.smallest),
                        count, np.full(6, np.nan), xy, view.stamp)

    def _known_depths(self, depths: Floats, goal_depths: Floats) -> tuple[Floats, Floats]:
        goal_depths = np.where(goal_depths > 0, goal_depths, self.settings.fallback_depth)
        return np.where(depths > 0, depths, goal_depths), goal_depths
