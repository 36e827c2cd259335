# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller as a node: views in, commands out, at a rate of its own."""

from __future__ import annotations

import sys
import threading
import time
import typing
from collections.abc import Mapping

from geometry_msgs.msg import TwistStamped
from rclpy.duration import Duration
from std_srvs.srv import SetBool, Trigger

from servo_nodes.control.controller import Controller, ControllerSettings
from servo_nodes.control.states import ENGAGED
from servo_nodes.ros.diagnostics import OK, WARN
from servo_nodes.ros.inputs import Inputs
from servo_nodes.ros.options import ControllerNodeSettings
from servo_nodes.ros.pacer import Pacer, raise_priority
from servo_nodes.ros.process import run
from servo_nodes.ros.reporter import Reporter
from servo_nodes.ros.sender import Sender
from servo_nodes.ros.shell import Shell, pause
from servo_nodes.values import Answer, Stamp

ZEROS = 20
LAST_ZEROS = 5


class ControllerNode(Shell):
    """Feeds the controller and publishes what it decides; decides nothing itself."""

    def __init__(self) -> None:
        super().__init__('controller', ControllerSettings, ControllerNodeSettings)
        self._lock = threading.Lock()
        self._pacer: Pacer | None = None
        self._zeros_left = 0

    def configure(self) -> str:
        """Make the core and its doors."""
        self.controller = Controller(self.parameters[ControllerSettings])
        self._command = self.doors.publish(TwistStamped, 'camera_twist')
        self._sender = Sender(self, self._command)
        self.reporter = Reporter(self, self._command)
        self._inputs = Inputs(self, self.controller, self._lock,
                              rectified=self.parameters[ControllerNodeSettings].image.rectified)
        self.doors.serve(SetBool, '~/engage', self._engage)
        self.doors.serve(Trigger, '~/reset', self._reset)
        return ''

    def own_process(self) -> None:
        """Run before others, where that is permitted."""
        refusal = raise_priority(self.parameters[ControllerNodeSettings].priority)
        if refusal:
            self.get_logger().info(refusal)

    def activate(self) -> str:
        """Start deciding, from standby."""
        self.reporter.begin()
        self._pacer = Pacer(self.controller.settings.rate, self._tick, self.fail, 'control')
        self._pacer.start()
        return ''

    def deactivate(self) -> str:
        """Disengage and leave zeros behind."""
        self._come_to_rest()
        self.reporter.end()
        return ''

    def cleanup(self) -> None:
        """Stop listening."""
        self._inputs.close()

    def rest(self) -> None:
        """Leave zeros as the last commands, and wait until they have arrived."""
        if self.active:
            self._come_to_rest()

    def adopt(self, settings: Mapping[type, object]) -> str:
        """Swap the controller's settings between two ticks."""
        new = settings.get(ControllerSettings)
        if not self.configured or new is None:
            return ''
        with self._lock:
            answer = self.controller.adopt(typing.cast(ControllerSettings, new))
        return '' if answer.ok else answer.text

    def _tick(self, now: Stamp, late: int) -> None:
        with self._lock:
            if late > self._pacer.period_ns:
                self.controller.overrun(late)
            command = self.controller.command(now)
        engaged = command.state in ENGAGED
        if engaged or command.twist.vector.any():
            self._zeros_left = ZEROS
        if engaged or self._zeros_left > 0:
            self._zeros_left -= 1
            self._sender.send(command.twist)
        self.reporter.note(command, late, time.monotonic_ns() - now)

    def _come_to_rest(self) -> None:
        if self._pacer is not None:
            self._pacer.end()
        with self._lock:
            self.controller.engage(False)
        for _ in range(LAST_ZEROS):
            self._sender.send_zero()
            pause(0.01)
        self._command.wait_for_all_acked(Duration(nanoseconds=100_000_000))

    def _engage(self, request: SetBool.Request, response: SetBool.Response) -> SetBool.Response:
        if request.data and not self.active:
            return self._told(response, 'engage', Answer(
                False, 'expected the node to be active, got inactive; activate it first'))
        self.reporter.count_graph()
        with self._lock:
            answer = self.controller.engage(request.data)
        return self._told(response, f'engage {request.data}', answer)

    def _reset(self, request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        with self._lock:
            answer = self.controller.reset()
        return self._told(response, 'reset', answer)

    def _told(self, response: typing.Any, request: str, answer: Answer) -> typing.Any:
        response.success, response.message = answer.ok, answer.text
        self.tell(OK if answer.ok else WARN, f'{request}: {answer.text}')
        return response


def main() -> None:
    """Run the node."""
    sys.exit(run(ControllerNode))
