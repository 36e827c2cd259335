# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The outlet: the frame in which a twist leaves, and the caps it must pass there.

With the camera's pose T_TC = (R, p) in the frame T where the twist is wanted, the same motion
reads w_T = R w and v_T = R v + p x w_T: the adjoint of T_TC with its lever arm p.
"""

from __future__ import annotations

import numpy as np

from servo_nodes import motion
from servo_nodes.control import caps
from servo_nodes.control.settings import CapsSettings, OutputSettings
from servo_nodes.values import Floats


class Outlet:
    """Limits twists at camera and tool, and expresses them where they are wanted."""

    def __init__(self, limits: CapsSettings, output: OutputSettings) -> None:
        self.frame = output.frame
        self.adjoint: Floats | None = None
        if output.from_camera:
            self.adjoint = motion.adjoint(motion.pose_from_numbers(output.from_camera))
        self._limits = limits
        self._axes = np.array(limits.axes)
        self._linear = min(limits.linear, limits.hard_linear)
        self._angular = min(limits.angular, limits.hard_angular)

    def ratio(self, twist: Floats) -> float:
        """Return the share of `twist` (6,) that the caps let through."""
        return float(caps.ratios(twist, linear=self._linear, angular=self._angular,
                                 tool=self.adjoint))

    def capped(self, twist: Floats) -> Floats:
        """Return `twist` (6,), camera in its optical frame, inside the caps at camera and tool."""
        return caps.scaled(twist, linear=self._linear, angular=self._angular, tool=self.adjoint)

    def next(self, sent: Floats, wanted: Floats, duration: float) -> Floats:
        """Return the twist (6,) that may follow `sent` after `duration` s, towards `wanted`."""
        limits = self._limits
        target = self.capped(wanted * self._axes)
        slewed = caps.slewed(sent, target, tool=self.adjoint,
                             linear_step=limits.linear_acceleration * duration,
                             angular_step=limits.angular_acceleration * duration)
        return self.capped(slewed)

    def braked(self, sent: Floats, duration: float) -> Floats:
        """Return the twist (6,) that follows `sent` after `duration` s of a hold."""
        limits = self._limits
        slower = caps.braked(sent, linear_step=limits.stop_deceleration * duration,
                             angular_step=limits.stop_angular_deceleration * duration,
                             tool=self.adjoint)
        return self.capped(slower)

    def expressed(self, twist: Floats) -> Floats:
        """Return `twist` (6,), camera in its optical frame, at the outlet's frame."""
        return twist if self.adjoint is None else self.adjoint @ twist
