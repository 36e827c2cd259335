# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Observes the controller from outside: every command with its time of receipt, every state."""

from __future__ import annotations

import time
import typing

import numpy as np
from diagnostic_msgs.msg import DiagnosticStatus
from geometry_msgs.msg import TwistStamped
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from std_srvs.srv import SetBool, Trigger

from servo_nodes.ros.rig import Rig
from servo_nodes.values import SECOND_NS, Stamp


class Received(typing.NamedTuple):
    """One command: when it came, steady ns; its stamp, ns; its six components."""

    at: Stamp
    stamp: Stamp
    vector: tuple[float, ...]

    @property
    def is_zero(self) -> bool:
        """Return whether all six components are exactly zero."""
        return not any(self.vector)


class Observer:
    """Watches one controller.

    Parameters
    ----------
    rig : Rig
    controller : str, name of its node, relative to the rig's namespace
    """

    def __init__(self, rig: Rig, controller: str = 'controller',
                 command: str = 'camera_twist') -> None:
        self._rig, self._controller = rig, controller
        self.commands: list[Received] = []
        self.states: list[tuple[Stamp, str, dict[str, str]]] = []
        self._command = command
        self._ear: typing.Any = None
        self.listen(True)
        rig.ear.create_subscription(
            DiagnosticStatus, f'{controller}/state', self._take_state,
            QoSProfile(depth=100, reliability=ReliabilityPolicy.RELIABLE,
                       durability=DurabilityPolicy.TRANSIENT_LOCAL))

    def listen(self, on: bool) -> None:
        """Subscribe to the command, or take the subscription back."""
        if self._ear is not None:
            self._rig.ear.destroy_subscription(self._ear)
        self._ear = self._rig.ear.create_subscription(
            TwistStamped, self._command, self._take,
            QoSProfile(depth=1000, reliability=ReliabilityPolicy.RELIABLE)) if on else None

    @property
    def state(self) -> str:
        """Return the last state word, empty before any."""
        return self.states[-1][1] if self.states else ''

    @property
    def reason(self) -> str:
        """Return the reason that came with it."""
        return self.states[-1][2].get('reason', '') if self.states else ''

    @property
    def moves(self) -> bool:
        """Return whether the last command was not zero."""
        return bool(self.commands) and not self.commands[-1].is_zero

    def reasons_since(self, at: Stamp) -> list[str]:
        """Return the reasons said after a time."""
        return [values.get('reason', '') for when, _, values in self.states[:] if when >= at]

    def engage(self, on: bool = True) -> SetBool.Response:
        """Ask for the loop to start or stop."""
        return self._rig.call(SetBool, f'{self._controller}/engage', SetBool.Request(data=on))

    def reset(self) -> Trigger.Response:
        """Ask for the way out of a fault."""
        return self._rig.call(Trigger, f'{self._controller}/reset')

    def stopped_after(self, at: Stamp) -> float | None:
        """Return the seconds from a time to the first of the zeros that last; None: it moves."""
        after = [command for command in self.commands[:] if command.at >= at]
        if not after:
            return 0.0
        if not after[-1].is_zero:
            return None
        moving = [index for index, command in enumerate(after) if not command.is_zero]
        first = after[moving[-1] + 1 if moving else 0]
        return (first.at - at) / SECOND_NS

    def gaps(self, since: Stamp, until: Stamp | None = None) -> np.ndarray:
        """Return the seconds between consecutive commands received in a span."""
        times = [command.at for command in self.commands
                 if command.at >= since and (until is None or command.at <= until)]
        return np.diff(np.array(times, dtype=np.int64)) / SECOND_NS

    def _take(self, message: TwistStamped) -> None:
        linear, angular = message.twist.linear, message.twist.angular
        stamp = message.header.stamp
        self.commands.append(Received(
            time.monotonic_ns(), stamp.sec * SECOND_NS + stamp.nanosec,
            (linear.x, linear.y, linear.z, angular.x, angular.y, angular.z)))

    def _take_state(self, message: DiagnosticStatus) -> None:
        self.states.append((time.monotonic_ns(), message.message,
                            {item.key: item.value for item in message.values}))
