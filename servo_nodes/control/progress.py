# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Progress of the loop: does the error grow, does it stand still, is the camera home?"""

from __future__ import annotations

import math
import typing

from servo_nodes.control.home import motion_left
from servo_nodes.control.servo import Solution
from servo_nodes.control.settings import ControllerSettings, SettleSettings, WatchdogSettings
from servo_nodes.control.travel import Leash
from servo_nodes.control.watch import age
from servo_nodes.values import Stamp, View

PARTS = 4
CLOSE = 5.0
FAR = [1.0] * 6
LEAST_STEP = 1.05
NOISE_PX = 2.0


class Growth:
    """How many times the error grew, all through a window.

    The window is cut into `PARTS` equal parts, each known by its largest error. Only when every
    part is clearly larger than the one before, the ratio of last to first counts: an error that
    swings, or that jumps once because somebody nudged the target, does not diverge.
    """

    def __init__(self) -> None:
        self.restart()

    def restart(self) -> None:
        """Forget the window."""
        self._peaks: list[float] = []
        self._peak = 0.0
        self._began: Stamp | None = None
        self.ratio = 1.0

    def add(self, error_px: float, now: Stamp, window: float) -> None:
        """Take the error at `now`."""
        if self._began is None:
            self._began = now
        if age(self._began, now) * PARTS >= window:
            self._peaks = [*self._peaks[1 - PARTS:], self._peak]
            self._began, self._peak = now, 0.0
            self.ratio = self._judged()
        self._peak = max(self._peak, error_px)

    def _judged(self) -> float:
        peaks = self._peaks
        if len(peaks) < PARTS or not peaks[-1] - peaks[0] > NOISE_PX:
            return 1.0
        if not all(peaks[k + 1] > LEAST_STEP * peaks[k] for k in range(PARTS - 1)):
            return 1.0
        return peaks[-1] / max(peaks[0], 1e-9)


class Stall:
    """For how long the error has made no progress."""

    def __init__(self) -> None:
        self.restart()

    def restart(self) -> None:
        """Forget what was best."""
        self._best = math.inf
        self._since: Stamp | None = None
        self.seconds = 0.0

    def add(self, error_px: float, now: Stamp, settings: WatchdogSettings,
            tolerance_px: float) -> None:
        """Take the error at `now`; below `tolerance_px` there is no progress to be made."""
        progress = error_px < (1.0 - settings.stalled_progress) * self._best
        if self._since is None or progress or error_px <= tolerance_px:
            self._best, self._since = error_px, now
        self.seconds = age(self._since, now)


class Settling:
    """Whether the camera is home: error and asked-for motion small, on average, for a while."""

    def __init__(self) -> None:
        self.restart()

    def restart(self) -> None:
        """Start to judge anew."""
        self._mean: list[float] = []
        self._last: Stamp = 0
        self._within: Stamp | None = None
        self.is_home = False

    def add(self, motion: typing.Sequence[float], error_px: float, now: Stamp,
            settings: SettleSettings, *, linear_noise: float = 0.0,
            angular_noise: float = 0.0) -> None:
        """Take what is left at `now`.

        Parameters
        ----------
        motion : 6 numbers or several times 6, m and rad, ways that are left to go, of which every
            one must be small
        error_px : float
        now : int, ns
        settings : SettleSettings
        linear_noise, angular_noise : float, m and rad, how surely the view tells the pose; nobody
            can be asked to stand nearer than that
        """
        sample = [error_px, *motion]
        if self._mean and now >= self._last:
            share = -math.expm1(-age(self._last, now) / max(settings.smoothing, 1e-9))
            sample = [old + share * (new - old)
                      for old, new in zip(self._mean, sample, strict=True)]
        self._mean, self._last = sample, now
        factor = settings.hysteresis if self.is_home else 1.0
        linear = factor * max(settings.linear, linear_noise)
        angular = factor * max(settings.angular, angular_noise)
        if not (sample[0] <= factor * settings.error_px and all(
                math.hypot(*sample[k:k + 3]) <= linear
                and math.hypot(*sample[k + 3:k + 6]) <= angular
                for k in range(1, len(sample), 6))):
            self._within, self.is_home = None, False
            return
        if self._within is None:
            self._within = now
        self.is_home = self.is_home or age(self._within, now) >= settings.duration


class Progress:
    """All that is followed while the loop moves, and the leash."""

    def __init__(self) -> None:
        self.growth, self.stall, self.settling = Growth(), Stall(), Settling()
        self.leash = Leash()
        self._seen: View | None = None
        self._left: list[float] = FAR

    def begin(self) -> None:
        """Judge anew from here, motion starts from rest; the leash stays tied."""
        self.growth.restart()
        self.stall.restart()
        self.settling.restart()

    def restart(self) -> None:
        """Judge anew and tie the leash here."""
        self.begin()
        self.leash.restart()

    def add(self, solution: Solution, twist: typing.Sequence[float], view: View | None,
            now: Stamp, settings: ControllerSettings) -> None:
        """Take what a moving loop knows at `now`.

        Parameters
        ----------
        solution : Solution
        twist : 6 numbers, the solution's
        view : View, the newest good one
        now : int, ns
        settings : ControllerSettings
        """
        watchdog, settle, error_px = settings.watchdog, settings.settle, solution.error_px
        tolerance_px = settle.error_px * (settle.hysteresis if self.settling.is_home else 1.0)
        self.growth.add(error_px, now, watchdog.diverging_window)
        self.stall.add(error_px, now, watchdog, tolerance_px)
        if view is not None and view is not self._seen:
            near = error_px <= CLOSE * settle.error_px
            self._seen, self._left = view, motion_left(view, settings) if near else FAR
        asked = [part / solution.gain for part in twist]
        scatter = [settle.noise_px * part for part in solution.scatter.tolist()]
        self.settling.add([*asked, *self._left], error_px, now, settle,
                          linear_noise=math.hypot(*scatter[:3]),
                          angular_noise=math.hypot(*scatter[3:]))
