# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller as a node: views in, commands out, at a rate of its own."""

from __future__ import annotations

import sys
import threading
import time
import typing
from collections.abc import Mapping
from dataclasses import replace

from geometry_msgs.msg import TwistStamped
from rclpy.clock import JumpThreshold
from rclpy.duration import Duration
from sensor_msgs.msg import CameraInfo, PointCloud2
from std_msgs.msg import Bool, Empty
from std_srvs.srv import SetBool, Trigger

from servo_nodes import wire
from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller, ControllerSettings
from servo_nodes.control.states import ENGAGED
from servo_nodes.ros.diagnostics import OK, WARN
from servo_nodes.ros.options import ControllerNodeSettings
from servo_nodes.ros.pacer import Pacer
from servo_nodes.ros.reporter import Reporter
from servo_nodes.ros.shell import Shell, camera_info_name, pause, run
from servo_nodes.ros.timeline import Timeline
from servo_nodes.values import Answer, Calibration, Reason, Stamp, Twist

FORWARD_JUMP = Duration(nanoseconds=2_000_000_000)
BACKWARD_JUMP = Duration(nanoseconds=-1_000_000)
ZEROS = 20
LAST_ZEROS = 5


class ControllerNode(Shell):
    """Feeds the controller and publishes what it decides; decides nothing itself."""

    def __init__(self) -> None:
        super().__init__('controller', ControllerSettings, ControllerNodeSettings)
        self._rectified = self.parameters[ControllerNodeSettings].image.rectified
        self._lock = threading.Lock()
        self._timeline = Timeline()
        self._pacer: Pacer | None = None
        self._calibration: Calibration | None = None
        self._zeros_left = 0
        self._frame = ''

    def configure(self) -> str:
        """Make the core and its doors."""
        self.controller = Controller(self.parameters[ControllerSettings])
        doors = self.doors
        self._command = doors.publish(TwistStamped, 'camera_twist')
        self.reporter = Reporter(self, self._command)
        doors.listen(PointCloud2, 'features', self._take_features)
        doors.listen(CameraInfo, 'camera_info', self._take_info, camera_info_name(self))
        doors.listen(Bool, '~/halt', lambda message: self.controller.halt(message.data))
        doors.listen(Empty, '~/heartbeat',
                     lambda message: self.controller.heartbeat(time.monotonic_ns()))
        doors.serve(SetBool, '~/engage', self._engage)
        doors.serve(Trigger, '~/reset', self._reset)
        self._jumps = self.get_clock().create_jump_callback(
            JumpThreshold(min_forward=FORWARD_JUMP, min_backward=BACKWARD_JUMP,
                          on_clock_change=True), post_callback=self._jumped)
        return ''

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
        """Forget the clock and the camera."""
        self._jumps.unregister()
        self._calibration = None

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
            self._publish(command.twist)
        self.reporter.note(command, late, time.monotonic_ns() - now)

    def _publish(self, twist: Twist) -> None:
        message = TwistStamped()
        self._frame = twist.frame_id
        wire.fill_twist(message, twist, self.now_ns())
        self._command.publish(message)

    def _come_to_rest(self) -> None:
        if self._pacer is not None:
            self._pacer.end()
        with self._lock:
            self.controller.engage(False)
        for _ in range(LAST_ZEROS):
            self._publish(Twist.zero(self._frame))
            pause(0.01)
        self._command.wait_for_all_acked(Duration(nanoseconds=100_000_000))

    def _take_features(self, message: PointCloud2) -> None:
        steady = time.monotonic_ns()
        try:
            view = wire.view_from_cloud(message)
        except ValueError as error:
            self.controller.refuse(Reason.NOT_FINITE, str(error))
            self.warn_seldom('features', str(error))
            return
        self.controller.observe(
            replace(view, stamp=self._timeline.steady(view.stamp, self.now_ns(), steady)), steady)
        self.reporter.take_view(view, steady, self.now_ns())

    def _take_info(self, message: CameraInfo) -> None:
        calibration = wire.calibration_from_message(message)
        if calibration == self._calibration:
            return
        self._calibration = calibration
        try:
            camera = Camera.from_calibration(calibration, rectified=self._rectified)
        except ValueError as error:
            self.controller.refuse(Reason.NO_CAMERA, f'camera_info: {error}')
            self.warn_seldom('camera_info', f'camera_info: {error}')
            return
        with self._lock:
            self.controller.calibrate(camera)

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

    def _jumped(self, jump: typing.Any) -> None:
        self._timeline.forget()
        with self._lock:
            self.controller.jump()
        self.warn_seldom('jump', 'the clock jumped; standing by')


def main() -> None:
    """Run the node."""
    sys.exit(run(ControllerNode))
