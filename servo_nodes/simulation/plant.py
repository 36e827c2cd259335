# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The arm: twist commands in, exact motion of the camera out.

A command waits for its delay, is rounded to the arm's steps, and is followed through a first-
order lag and acceleration limits. While the velocity xi is constant the pose moves by exp(xi t),
exactly. While it changes, it is stepped in ticks of `TICK_NS`:

    x(h) = c + (x0 - c) exp(-h / tau),   mean = c + (x0 - c) tau/h (1 - exp(-h / tau))

and the pose moves by exp(mean h), which leaves an error of third order in h (Magnus' series,
first term). The ticks are counted from the change of command, so the pose at a time does not
depend on how often it was asked for.
"""

from __future__ import annotations

import collections
import math

import numpy as np

from servo_nodes import motion
from servo_nodes.simulation.settings import PlantSettings
from servo_nodes.values import SECOND_NS, Floats, Stamp

TICK_NS = 2_000_000


class Plant:
    """An arm that carries the camera.

    Parameters
    ----------
    settings : PlantSettings
    T_WC : (4, 4), pose of the camera in the world at the start
    now : int, ns
    """

    def __init__(self, settings: PlantSettings, T_WC: Floats, now: Stamp) -> None:
        self._anchor, self._since = T_WC, now
        self._velocity = np.zeros(6)
        self._goal = np.zeros(6)
        self._ends: Stamp | None = None
        self._waiting: collections.deque[tuple[Stamp, Floats]] = collections.deque()
        self._now = now
        self._set(settings)

    def adopt(self, settings: PlantSettings) -> None:
        """Let new settings apply from now on."""
        self._move_anchor(self._now)
        self._set(settings)

    def _set(self, settings: PlantSettings) -> None:
        self.settings = settings
        error = motion.pose_from_parts(
            motion.rotation_from_vector(settings.hand_eye_rotation), settings.hand_eye_translation)
        self._true_from_believed = motion.adjoint(motion.inverse(error))

    @property
    def now(self) -> Stamp:
        """Return the time the arm has been advanced to, ns."""
        return self._now

    def apply(self, twist: Floats, stamp: Stamp) -> None:
        """Hand over a command (6,), camera frame, that arrives at `stamp`, ns.

        A stamp that has passed counts as now. Commands take effect in the order they were given.
        """
        start = max(stamp, self._now) + round(self.settings.delay * SECOND_NS)
        if self._waiting:
            start = max(start, self._waiting[-1][0])
        self._waiting.append((start, self._executed(twist)))

    def advance_to(self, t: Stamp) -> None:
        """Move on to `t`, ns; a time that has passed changes nothing."""
        while True:
            change = self._next_change()
            if change is None or change > t:
                break
            self._move_anchor(change)
            self._begin_next(change)
        self._now = max(self._now, t)
        if not self._is_steady():
            ticks = (self._now - self._since) // TICK_NS
            self._move_anchor(self._since + ticks * TICK_NS)

    def state(self) -> tuple[Floats, Floats]:
        """Return T_WC (4, 4) and the true twist (6,) of the camera, in its own frame, now."""
        return self._moved(self._now)

    def _executed(self, twist: Floats) -> Floats:
        """Return what the arm makes of a command: rounded, and seen through the hand-eye error."""
        rounded = np.array(twist, dtype=np.float64)
        for part, step in ((slice(0, 3), self.settings.linear_step),
                           (slice(3, 6), self.settings.angular_step)):
            if step > 0:
                rounded[part] = np.round(rounded[part] / step) * step
        executed: Floats = self._true_from_believed @ rounded
        return executed

    def _next_change(self) -> Stamp | None:
        due = [self._waiting[0][0]] if self._waiting else []
        if self._ends is not None:
            due.append(self._ends)
        return min(due, default=None)

    def _begin_next(self, now: Stamp) -> None:
        if self._waiting and self._waiting[0][0] == now:
            _, self._goal = self._waiting.popleft()
            stops = self.settings.silence == 'stop'
            self._ends = now + round(self.settings.timeout * SECOND_NS) if stops else None
        else:
            self._goal, self._ends = np.zeros(6), None

    def _is_steady(self) -> bool:
        ideal = self.settings.lag == 0 and not self.settings.limited
        return ideal or np.array_equal(self._velocity, self._goal)

    def _move_anchor(self, t: Stamp) -> None:
        if t > self._since:
            self._anchor, self._velocity = self._moved(t)
            self._since = t

    def _moved(self, t: Stamp) -> tuple[Floats, Floats]:
        """Return pose and velocity at `t` without keeping them."""
        whole, rest = divmod(t - self._since, TICK_NS)
        if self._is_steady():
            span = (t - self._since) / SECOND_NS
            velocity = self._goal
            return self._anchor @ motion.exp(velocity * span), velocity
        spans = [TICK_NS / SECOND_NS] * whole + ([rest / SECOND_NS] if rest else [])
        velocity, pose = self._velocity, self._anchor
        steps = np.empty((len(spans), 6))
        for i, span in enumerate(spans):
            velocity, mean = self._tick(velocity, span)
            steps[i] = mean * span
        for moved in motion.exp(steps):
            pose = pose @ moved
        return pose, velocity

    def _tick(self, velocity: Floats, span: float) -> tuple[Floats, Floats]:
        """Return the velocity after `span`, s, and its mean over the span."""
        decay = math.exp(-span / self.settings.lag) if self.settings.lag > 0 else 0.0
        lasting = self.settings.lag / span * (1 - decay)
        after = self._goal + (velocity - self._goal) * decay
        mean = self._goal + (velocity - self._goal) * lasting
        if float(np.abs(after - self._goal).max()) < 1e-9:
            after = self._goal
        if self.settings.limited:
            after = after.copy()
            for part, limit in ((slice(0, 3), self.settings.linear_acceleration),
                                (slice(3, 6), self.settings.angular_acceleration)):
                change = after[part] - velocity[part]
                length = float(np.linalg.norm(change))
                if length > limit * span or (length > 0 and self.settings.lag == 0):
                    change *= min(1.0, limit * span / length)
                    ramp = min(1.0, length / (limit * span))
                    after[part] = velocity[part] + change
                    mean[part] = after[part] - 0.5 * ramp * change
        return after, mean
