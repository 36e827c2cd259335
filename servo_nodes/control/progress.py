# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Progress of the loop: does the error grow, does it stand still, is the camera home?"""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.control.settings import SettleSettings, WatchdogSettings
from servo_nodes.control.watch import age
from servo_nodes.values import SECOND_NS, Floats, Stamp

PARTS = 4
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
        self._mean: Floats | None = None
        self._last: Stamp = 0
        self._within: Stamp | None = None
        self.is_home = False

    def add(self, motion: Floats, error_px: float, now: Stamp, settings: SettleSettings) -> None:
        """Take what is left at `now`.

        Parameters
        ----------
        motion : (6,), m and rad, the way that the law still asks for: its twist over its gain
        error_px : float
        now : int, ns
        settings : SettleSettings
        """
        sample = np.append(motion, error_px)
        if self._mean is None or now < self._last:
            self._mean = sample
        else:
            share = -math.expm1(-(now - self._last) / SECOND_NS / max(settings.smoothing, 1e-9))
            self._mean = self._mean + share * (sample - self._mean)
        self._last = now
        factor = settings.hysteresis if self.is_home else 1.0
        m = self._mean.tolist()
        small = (math.hypot(m[0], m[1], m[2]) <= factor * settings.linear
                 and math.hypot(m[3], m[4], m[5]) <= factor * settings.angular
                 and m[6] <= factor * settings.error_px)
        if not small:
            self._within, self.is_home = None, False
            return
        if self._within is None:
            self._within = now
        self.is_home = self.is_home or age(self._within, now) >= settings.duration
