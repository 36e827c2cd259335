# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The outlet: the frame in which a twist leaves, and the caps it must pass there.

With the camera's pose T_TC = (R, p) in the frame T where the twist is wanted, the same motion
reads w_T = R w and v_T = R v + p x w_T: the adjoint of T_TC with its lever arm p.

The arithmetic is that of `caps`, spelt out in plain numbers for one twist: on six numbers the
overhead of arrays would be most of a tick. A test holds both together.
"""

from __future__ import annotations

import math
import typing

import numpy as np

from servo_nodes import motion
from servo_nodes.control.settings import CapsSettings, OutputSettings
from servo_nodes.values import Floats

Numbers = typing.Sequence[float]
REST: Numbers = (0.0,) * 6
_ONE_STEP = 1.0 + 1e-9


class Outlet:
    """Limits twists at camera and tool, and expresses them where they are wanted.

    A twist is six numbers here: the camera's, m/s and rad/s, in its optical frame.
    """

    def __init__(self, limits: CapsSettings, output: OutputSettings) -> None:
        self.frame = output.frame
        self.adjoint: Floats | None = None
        self._at_tool: tuple[Numbers, ...] = ()
        if output.from_camera:
            self.adjoint = motion.adjoint(motion.pose_from_numbers(output.from_camera))
            self._at_tool = tuple(tuple(row) for row in self.adjoint[:3].tolist())
        self._limits = limits
        self._linear = min(limits.linear, limits.hard_linear)
        self._angular = min(limits.angular, limits.hard_angular)

    def speeds(self, twist: Numbers) -> tuple[float, float]:
        """Return the linear speed of the faster of camera and tool, and the turn rate."""
        a, b, c, d, e, f = twist
        linear = math.hypot(a, b, c)
        if self._at_tool:
            linear = max(linear, math.hypot(*(
                m[0] * a + m[1] * b + m[2] * c + m[3] * d + m[4] * e + m[5] * f
                for m in self._at_tool)))
        return linear, math.hypot(d, e, f)

    def ratio(self, twist: Numbers) -> float:
        """Return the share of `twist` that the caps let through; none of what is not finite."""
        return self._ratio(twist, self._linear, self._angular)

    def _ratio(self, twist: Numbers, linear: float, angular: float) -> float:
        v, w = self.speeds(twist)
        if not (v < math.inf and w < math.inf):
            return 0.0
        return min(1.0, linear / v if v > linear else 1.0, angular / w if w > angular else 1.0)

    def capped(self, twist: Numbers) -> Numbers:
        """Return `twist` inside the caps at camera and tool, its direction kept."""
        return _times(self.ratio(twist), twist)

    def next(self, sent: Numbers, wanted: Numbers, duration: float) -> Numbers:
        """Return the twist that may follow `sent` after `duration` s, on the way to `wanted`."""
        if not duration > 0:
            return self.capped(sent)
        limits = self._limits
        allowed = [axis * part for axis, part in zip(limits.axes, wanted, strict=True)]
        change = [part - old for part, old in zip(self.capped(allowed), sent, strict=True)]
        step = _times(self._ratio(change, limits.linear_acceleration * duration,
                                  limits.angular_acceleration * duration), change)
        return self.capped([old + part for old, part in zip(sent, step, strict=True)])

    def braked(self, sent: Numbers, duration: float) -> Numbers:
        """Return the twist that follows `sent` after `duration` s of a hold, at last exact rest.

        The part that takes longer to stop sets the pace of both.
        """
        if not duration > 0:
            return self.capped(sent)
        limits = self._limits
        v, w = self.speeds(sent)
        steps = max(v / (limits.stop_deceleration * duration),
                    w / (limits.stop_angular_deceleration * duration))
        if not _ONE_STEP < steps < math.inf:
            return REST
        return self.capped(_times(1.0 - 1.0 / steps, sent))

    def expressed(self, twist: Numbers) -> Floats:
        """Return `twist` as an array (6,) at the outlet's frame."""
        vector = np.array(twist)
        return vector if self.adjoint is None else self.adjoint @ vector


def _times(ratio: float, twist: Numbers) -> Numbers:
    """Return the scaled twist; a ratio of 0 is exact rest, whatever the twist."""
    if ratio == 1.0:
        return twist
    return [ratio * part for part in twist] if ratio > 0 else REST
