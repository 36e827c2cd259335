# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the controller is told from outside: messages read, stamps carried to the steady clock."""

from __future__ import annotations

import threading
import time
import typing
from dataclasses import replace

from rclpy.clock import JumpThreshold
from rclpy.duration import Duration
from sensor_msgs.msg import CameraInfo, PointCloud2
from std_msgs.msg import Bool, Empty

from servo_nodes import wire
from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.ros.names import camera_info_name
from servo_nodes.ros.timeline import Timeline
from servo_nodes.values import Calibration, Reason

# A bag played ten times too fast makes steps of a second or so; that is no jump.
FORWARD_JUMP = Duration(nanoseconds=2_000_000_000)
BACKWARD_JUMP = Duration(nanoseconds=-1_000_000)


class Inputs:
    """Opens the controller's inputs and hands what comes to it.

    Parameters
    ----------
    node : ControllerNode
    controller : Controller
    lock : held while the controller decides; only what must not overlap a decision waits for it
    rectified : bool, the features come from rectified images
    """

    def __init__(self, node: typing.Any, controller: Controller, lock: threading.Lock, *,
                 rectified: bool) -> None:
        self._node, self._controller, self._lock = node, controller, lock
        self._rectified = rectified
        self._timeline = Timeline()
        self._calibration: Calibration | None = None
        doors = node.doors
        doors.listen(PointCloud2, 'features', self._take_features)
        doors.listen(CameraInfo, 'camera_info', self._take_info, camera_info_name(node))
        doors.listen(Bool, '~/halt', lambda message: controller.halt(message.data))
        doors.listen(Empty, '~/heartbeat',
                     lambda message: controller.heartbeat(time.monotonic_ns()))
        self._jumps = node.get_clock().create_jump_callback(
            JumpThreshold(min_forward=FORWARD_JUMP, min_backward=BACKWARD_JUMP,
                          on_clock_change=True), post_callback=self._jumped)

    def close(self) -> None:
        """Stop listening to the clock; the doors close by themselves."""
        self._jumps.unregister()

    def _take_features(self, message: PointCloud2) -> None:
        steady = time.monotonic_ns()
        try:
            view = wire.view_from_cloud(message)
        except ValueError as error:
            self._controller.refuse(Reason.NOT_FINITE, str(error))
            self._node.warn_seldom('features', f'features dropped: {error}')
            return
        node_now = self._node.now_ns()
        stamp = self._timeline.steady(view.stamp, node_now, steady)
        self._controller.observe(replace(view, stamp=stamp), steady)
        self._node.reporter.take_view(view, steady, node_now)

    def _take_info(self, message: CameraInfo) -> None:
        calibration = wire.calibration_from_message(message)
        if calibration == self._calibration:
            return
        self._calibration = calibration
        try:
            camera = Camera.from_calibration(calibration, rectified=self._rectified)
        except ValueError as error:
            self._controller.refuse(Reason.NO_CAMERA, f'camera_info: {error}')
            self._node.warn_seldom('camera_info', f'camera_info: {error}')
            return
        with self._lock:
            self._controller.calibrate(camera)

    def _jumped(self, jump: typing.Any) -> None:
        self._timeline.forget()
        with self._lock:
            self._controller.jump()
        self._node.warn_seldom('jump', 'the clock jumped: standing by')
