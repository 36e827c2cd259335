# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Write what the demo hears, and the parameters in force, into a standard rosbag2 recording."""

from __future__ import annotations

import pathlib
import time
import typing
from collections.abc import Mapping

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import PoseStamped, TwistStamped
from rcl_interfaces.msg import ParameterEvent, ParameterValue
from rclpy.qos import QoSProfile
from sensor_msgs.msg import CameraInfo, Image, PointCloud2

from servo_nodes import __version__
from servo_nodes.ros.demo_processes import Trouble
from servo_nodes.values import SECOND_NS

# The namespace of the launch files; the demo's own is another one in every run.
NAMESPACE = '/servo'
KINDS: Mapping[str, type] = {
    'image': Image, 'camera_info': CameraInfo, 'features': PointCloud2,
    'camera_twist': TwistStamped, 'true_pose': PoseStamped, 'controller/state': DiagnosticStatus,
    '/diagnostics': DiagnosticArray}
PARAMETERS = '/parameter_events'
_ARRAYS = {'bool_array_value': np.bool_, 'integer_array_value': np.int64,
           'double_array_value': np.float64}


class Bag:
    """A recording (MCAP, its chunks compressed with zstd); nothing is written before `begin`.

    Raises
    ------
    Trouble
        When the folder is there already, or cannot be made.
    """

    def __init__(self, folder: pathlib.Path) -> None:
        from rosbags.rosbag2 import CompressionFormat, CompressionMode, StoragePlugin, Writer
        from rosbags.rosbag2.errors import WriterError
        from rosbags.typesys import Stores, get_typestore
        self._types = get_typestore(Stores.ROS2_JAZZY)
        self._connections: dict[str, typing.Any] = {}
        self._writing = False
        try:
            self._writer = Writer(folder, version=9, storage_plugin=StoragePlugin.MCAP)
            self._writer.set_compression(CompressionMode.STORAGE, CompressionFormat.ZSTD)
            self._writer.set_custom_data('servo_nodes', __version__)
            self._writer.open()
        except (WriterError, OSError) as error:
            raise Trouble(f'--bag {folder}: expected a folder that is not there yet, got: '
                          f'{error}') from error

    def listen(self, node: typing.Any, qos: Mapping[str, QoSProfile]) -> None:
        """Subscribe to everything worth keeping, undecoded."""
        for name, kind in KINDS.items():
            def take(data: bytes, name: str = name) -> None:
                if self._writing:
                    self._write(name, KINDS[name], data)
            node.create_subscription(kind, name, take, qos[name], raw=True)

    def begin(self, parameters: Mapping[str, Mapping[str, ParameterValue]]) -> None:
        """Write the parameters of each node, as if it had declared them now, and start."""
        for node, values in parameters.items():
            self._write(PARAMETERS, ParameterEvent, self._event(f'{NAMESPACE}/{node}', values))
        self._writing = True

    def close(self) -> None:
        """End the recording."""
        self._writing = False
        self._writer.close()

    def _event(self, node: str, values: Mapping[str, ParameterValue]) -> bytes:
        """Return the event in plain CDR; some middleware pads empty arrays beyond it."""
        kinds = self._types.types
        sec, nanosec = divmod(time.time_ns(), SECOND_NS)
        parameters = [kinds['rcl_interfaces/msg/Parameter'](
            name=name, value=kinds['rcl_interfaces/msg/ParameterValue'](
                **{field: _plain(field, getattr(value, field)) for field in
                   value.get_fields_and_field_types()}))
            for name, value in values.items()]
        kind = 'rcl_interfaces/msg/ParameterEvent'
        return bytes(self._types.serialize_cdr(kinds[kind](
            stamp=kinds['builtin_interfaces/msg/Time'](sec=sec, nanosec=nanosec), node=node,
            new_parameters=parameters, changed_parameters=[], deleted_parameters=[]), kind))

    def _write(self, name: str, kind: type, data: bytes) -> None:
        topic = name if name.startswith('/') else f'{NAMESPACE}/{name}'
        if topic not in self._connections:
            package, _, _ = kind.__module__.partition('.')
            self._connections[topic] = self._writer.add_connection(
                topic, f'{package}/msg/{kind.__name__}', typestore=self._types)
        self._writer.write(self._connections[topic], time.time_ns(), data)


def _plain(field: str, value: typing.Any) -> typing.Any:
    """Return a field as the writer takes it: numbers, flags and bytes as arrays."""
    if field == 'byte_array_value':
        return np.frombuffer(b''.join(value), np.uint8)
    return np.array(value, _ARRAYS[field]) if field in _ARRAYS else value
