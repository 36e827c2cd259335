# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A ROS client that watches the loop from outside, records it, and asks its services."""

from __future__ import annotations

import math
import time
import typing
from collections.abc import Callable, Mapping

import numpy as np
import rclpy
from diagnostic_msgs.msg import DiagnosticStatus
from geometry_msgs.msg import PoseStamped, TwistStamped
from rcl_interfaces.msg import Parameter, ParameterValue
from rcl_interfaces.srv import GetParameters, ListParameters, SetParametersAtomically
from rclpy.executors import SingleThreadedExecutor
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy, qos_profile_sensor_data
from sensor_msgs.msg import CameraInfo, Image, PointCloud2
from std_msgs.msg import Float64
from std_srvs.srv import SetBool, Trigger

from servo_nodes import motion, wire
from servo_nodes.camera import Camera
from servo_nodes.report.overlay import encoded, overlay
from servo_nodes.report.record import Event, Picture, Recorder
from servo_nodes.ros.demo_processes import Trouble
from servo_nodes.values import SECOND_NS, Answer, Floats, Stamp, State, View

SERIES = (
    ('error', 'px', 'error'), ('points', '1', 'seen'), ('condition', '1', 'condition'),
    ('twist', 'm/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz'),
    ('caps', 'm/s, rad/s', 'linear', 'angular'),
    ('latency', 'ms', 'exposure to image', 'image to features', 'features to command'))
_DEEP = QoSProfile(depth=20, reliability=ReliabilityPolicy.RELIABLE)
_LATCHED = QoSProfile(depth=10, reliability=ReliabilityPolicy.RELIABLE,
                      durability=DurabilityPolicy.TRANSIENT_LOCAL)
_NEWEST = QoSProfile(depth=2, reliability=ReliabilityPolicy.BEST_EFFORT)
QOS = {
    'controller/state': _LATCHED, 'controller/error_px': _DEEP, 'controller/condition': _DEEP,
    'controller/latency_ms': _DEEP, 'camera_twist': _DEEP, 'features': _DEEP, 'true_pose': _DEEP,
    'camera_info': qos_profile_sensor_data, 'image': _NEWEST, '/diagnostics': _DEEP}
_KINDS = {bool: (1, 'bool_value'), int: (2, 'integer_value'), float: (3, 'double_value'),
          str: (4, 'string_value'), tuple: (8, 'double_array_value')}


class Watch:
    """Subscribes to everything the loop says and notes it; `spin_until` lets time pass.

    Parameters
    ----------
    namespace : str, of the three nodes
    recorder : Recorder
    check : called while waiting; raises when waiting is in vain
    """

    def __init__(self, namespace: str, recorder: Recorder, check: Callable[[], None]) -> None:
        self._namespace, self._check = namespace, check
        self.recorder = recorder
        for series in SERIES:
            recorder.declare(*series)
        self.recording = False
        self.state: State | None = None
        self.reason, self.detail = 'none', ''
        self.error_px = self._condition = math.nan
        self.twist: Floats = np.zeros(6)
        self.view: View | None = None
        self.pose: Floats | None = None
        self.poses: list[tuple[Stamp, Floats]] = []
        self.images = 0
        self.caps = (math.nan, math.nan)
        self.camera: Camera | None = None
        self._image: Image | None = None
        self._arrivals: dict[Stamp, Stamp] = {}
        self._delivered = (math.nan, math.nan)
        self.node = rclpy.create_node('demo', namespace=namespace)
        self._executor = SingleThreadedExecutor()
        self._executor.add_node(self.node)
        for kind, name, take in (
                (DiagnosticStatus, 'controller/state', self._take_state),
                (Float64, 'controller/error_px', self._take_error),
                (Float64, 'controller/condition', self._take_condition),
                (Float64, 'controller/latency_ms', self._take_latency),
                (TwistStamped, 'camera_twist', self._take_twist),
                (PointCloud2, 'features', self._take_features),
                (PoseStamped, 'true_pose', self._take_pose),
                (CameraInfo, 'camera_info', self._take_info),
                (Image, 'image', self._take_image)):
            self.node.create_subscription(kind, name, take, QOS[name])

    def close(self) -> None:
        """Leave the graph."""
        self._executor.shutdown(timeout_sec=0.5)
        self.node.destroy_node()

    # -- waiting and asking

    def spin_until(self, true: Callable[[], bool], seconds: float,
                   each: Callable[[], None] = lambda: None) -> bool:
        """Handle messages until a condition holds; False when it does not in time."""
        until = time.monotonic() + seconds
        while not true():
            if time.monotonic() > until:
                return False
            self._executor.spin_once(timeout_sec=0.05)
            self._check()
            each()
        return True

    def ask(self, kind: typing.Any, name: str, request: typing.Any,
            seconds: float = 5.0) -> typing.Any:
        """Return a service's response; `Trouble` when there is none in time."""
        client: typing.Any = self.node.create_client(kind, name)
        try:
            if not self.spin_until(client.service_is_ready, seconds):
                raise Trouble(f'{name}: expected this service within {seconds:g} s, got none')
            future = client.call_async(request)
            if not self.spin_until(future.done, seconds):
                raise Trouble(f'{name}: expected an answer within {seconds:g} s, got none')
            return future.result()
        finally:
            self.node.destroy_client(client)

    def trigger(self, name: str) -> Answer:
        """Call a Trigger service."""
        response = self.ask(Trigger, name, Trigger.Request())
        return Answer(response.success, response.message)

    def engage(self, on: bool) -> Answer:
        """Start or stop the loop."""
        response = self.ask(SetBool, 'controller/engage', SetBool.Request(data=on))
        return Answer(response.success, response.message)

    def set_parameters(self, node: str, values: Mapping[str, object]) -> Answer:
        """Set parameters of a node, all or none."""
        request = SetParametersAtomically.Request(parameters=[
            Parameter(name=name, value=_parameter_value(value)) for name, value in values.items()])
        result = self.ask(SetParametersAtomically, f'{node}/set_parameters_atomically',
                          request).result
        return Answer(result.successful, result.reason)

    def parameters(self, node: str) -> dict[str, ParameterValue]:
        """Return every parameter of a node that a reader may want to know."""
        listed = self.ask(ListParameters, f'{node}/list_parameters', ListParameters.Request())
        names = [name for name in sorted(listed.result.names)
                 if not name.startswith(('qos_overrides', 'start_type_description'))]
        got = self.ask(GetParameters, f'{node}/get_parameters', GetParameters.Request(names=names))
        return dict(zip(names, got.values, strict=True))

    # -- noting

    def _note(self, name: str, stamp: Stamp, *values: float) -> None:
        if self.recording:
            self.recorder.note(name, stamp, *values)

    def _take_state(self, message: DiagnosticStatus) -> None:
        values = {pair.key: pair.value for pair in message.values}
        self.state = State(message.message)
        self.reason, self.detail = values.get('reason', 'none'), values.get('detail', '')
        if self.recording:
            self.recorder.turn(Event(time.time_ns(), message.message, self.reason, self.detail))

    def _take_error(self, message: Float64) -> None:
        self.error_px = message.data
        self._note('error', time.time_ns(), message.data)

    def _take_condition(self, message: Float64) -> None:
        self._note('condition', time.time_ns(), message.data)

    def _take_latency(self, message: Float64) -> None:
        image, features = self._delivered
        if math.isfinite(image + features + message.data):
            self._note('latency', time.time_ns(), image, features,
                       max(0.0, message.data - image - features))
            self._delivered = (math.nan, math.nan)

    def _take_twist(self, message: TwistStamped) -> None:
        self.twist = wire.twist_from_message(message).vector
        self._note('twist', time.time_ns(), *self.twist)

    def _take_features(self, message: PointCloud2) -> None:
        now, view = time.time_ns(), wire.view_from_cloud(message)
        self.view = view
        arrived = self._arrivals.pop(view.stamp, None)
        if arrived is not None and len(view):
            self._delivered = ((arrived - view.stamp) / 1e6, max(0, now - arrived) / 1e6)
        self._note('points', now, len(view))
        if self.recording and len(view) and self.camera is not None:
            self.recorder.points(view.stamp, view.ids,
                                 self.camera.pixels_from_normalised(view.points_xy),
                                 self.camera.pixels_from_normalised(view.goal_xy))

    def _take_pose(self, message: PoseStamped) -> None:
        translation, quaternion = wire.parts_from_pose(message.pose)
        self.pose = motion.pose_from_parts(motion.rotation_from_quaternion(quaternion),
                                           translation)
        if self.recording:
            self.poses.append((wire.stamp_from_time(message.header.stamp), self.pose))

    def _take_info(self, message: CameraInfo) -> None:
        if self.camera is None:
            self.camera = Camera.from_calibration(wire.calibration_from_message(message))
            self.recorder.image_size = self.camera.size

    def _take_image(self, message: Image) -> None:
        self._image = message
        self.images += 1
        self._arrivals[wire.stamp_from_time(message.header.stamp)] = time.time_ns()
        while len(self._arrivals) > 30:
            self._arrivals.pop(next(iter(self._arrivals)))
        if self.recording:
            self._note('caps', time.time_ns(), *self.caps)

    # -- pictures

    def keep_picture(self, name: str, caption: str, *, plain: bool = False) -> None:
        """Keep the newest image for the report, with everything known drawn on it."""
        if self._image is None:
            return
        image = wire.image_from_message(self._image)
        pixels = np.ascontiguousarray(image.array[..., ::-1] if image.encoding == 'rgb8'
                                      else image.array)
        if pixels.dtype != np.uint8:
            pixels = (pixels >> 8).astype(np.uint8)
        if not plain:
            pixels = self._drawn(pixels)
        data = encoded(pixels, most_width=480 if name == 'stop' else 960)
        self.recorder.pictures.append(Picture(name, image.stamp, caption, data))

    def _drawn(self, pixels: typing.Any) -> typing.Any:
        now = goal = np.empty((0, 2))
        if self.view is not None and self.camera is not None and len(self.view):
            now = self.camera.pixels_from_normalised(self.view.points_xy)
            goal = self.camera.pixels_from_normalised(self.view.goal_xy)
        speed = float(np.linalg.norm(self.twist[:3])), float(np.linalg.norm(self.twist[3:]))
        return overlay(pixels, points_px=now, goal_px=goal, state=self.state, reason=self.reason,
                       text=self.detail, error_px=self.error_px, points=(len(now), None),
                       speed=speed, caps=self.caps)


def offsets(poses: list[tuple[Stamp, Floats]], home: Floats) -> list[tuple[Stamp, Floats]]:
    """Return poses (4, 4) as x, y, z, m, and rotation vector, rad, in the frame of `home`."""
    back = motion.inverse(home)
    return [(stamp, np.concatenate([(relative := back @ pose)[:3, 3],
                                    motion.vector_from_rotation(relative[:3, :3])]))
            for stamp, pose in poses]


def _parameter_value(value: object) -> ParameterValue:
    kind, field = _KINDS[type(value)]
    return ParameterValue(type=kind, **{field: list(value) if isinstance(value, tuple) else value})


def plain_value(value: ParameterValue) -> bool | int | float | str:
    """Return a parameter's value as a reader reads it."""
    for kind, field in _KINDS.values():
        if value.type == kind:
            found = getattr(value, field)
            return ', '.join(f'{item:.6g}' for item in found) if kind == 8 else found
    return 'none'


def speeds(twist: Floats) -> tuple[float, float]:
    """Return mm/s and deg/s of a twist."""
    return (1000 * float(np.linalg.norm(twist[:3])),
            math.degrees(float(np.linalg.norm(twist[3:]))))


def seconds_since(stamp: Stamp) -> float:
    """Return the time since a moment of the system clock, s."""
    return (time.time_ns() - stamp) / SECOND_NS
