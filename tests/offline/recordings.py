# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Recordings that the tests make: the bare cores in a simulated loop, written by rosbags.

The loop here is written out, tick by tick, and shares nothing with the one under test.
"""

from __future__ import annotations

import functools
import pathlib
from dataclasses import dataclass, field

import cv2
import numpy as np
from rosbags.rosbag2 import CompressionFormat, CompressionMode, StoragePlugin, Writer
from rosbags.typesys import Stores, get_typestore

from servo_nodes import wire
from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller, ControllerSettings
from servo_nodes.control.states import ENGAGED
from servo_nodes.goal import Goal
from servo_nodes.settings import settings_from_mapping
from servo_nodes.simulation.simulator import Simulator, SimulatorSettings
from servo_nodes.values import Image, View

START = 1_700_000_000_000_000_000
PERIOD, EXPOSURE, DELAY, ENGAGED_AT = 10_000_000, 33_333_333, 12_000_000, 300_000_000
ZEROS = 20
SIMULATOR = {'start.translation': (0.04, 0.03, -0.1), 'start.rotation': (0.05, 0.02, 0.15)}


@functools.cache
def store():
    """Return the standard message types."""
    return get_typestore(Stores.LATEST)


def kind(name):
    """Return the class of a message type."""
    return store().types[name]


def header(stamp, frame_id):
    """Return a std_msgs/Header."""
    sec, nanosec = divmod(stamp, 1_000_000_000)
    return kind('std_msgs/msg/Header')(
        stamp=kind('builtin_interfaces/msg/Time')(sec=sec, nanosec=nanosec), frame_id=frame_id)


def cloud_message(view):
    """Return the PointCloud2 of a view."""
    message = kind('sensor_msgs/msg/PointCloud2')(
        header=header(0, ''), height=0, width=0, fields=[], is_bigendian=False, point_step=0,
        row_step=0, data=np.empty(0, np.uint8), is_dense=True)
    wire.fill_cloud(message, view, kind('sensor_msgs/msg/PointField'))
    message.data = np.frombuffer(message.data, np.uint8)
    return message


def twist_message(twist, stamp):
    """Return the TwistStamped of a twist."""
    vector = kind('geometry_msgs/msg/Vector3')
    x, y, z, a, b, c = twist.vector.tolist()
    return kind('geometry_msgs/msg/TwistStamped')(
        header=header(stamp, twist.frame_id), twist=kind('geometry_msgs/msg/Twist')(
            linear=vector(x=x, y=y, z=z), angular=vector(x=a, y=b, z=c)))


def info_message(calibration, stamp):
    """Return the CameraInfo of a calibration."""
    return kind('sensor_msgs/msg/CameraInfo')(
        header=header(stamp, calibration.frame_id), height=calibration.height,
        width=calibration.width, distortion_model=calibration.model,
        d=np.array(calibration.d), k=np.array(calibration.k), r=np.array(calibration.r),
        p=np.array(calibration.p), binning_x=0, binning_y=0,
        roi=kind('sensor_msgs/msg/RegionOfInterest')(
            x_offset=0, y_offset=0, height=0, width=0, do_rectify=False))


def image_message(image):
    """Return the Image of pixels."""
    pixels = np.ascontiguousarray(image.array)
    return kind('sensor_msgs/msg/Image')(
        header=header(image.stamp, image.frame_id), height=pixels.shape[0], width=pixels.shape[1],
        encoding=image.encoding, is_bigendian=0, step=pixels.strides[0],
        data=pixels.reshape(-1).view(np.uint8))


def compressed_message(image, suffix='.png'):
    """Return the CompressedImage of pixels."""
    return kind('sensor_msgs/msg/CompressedImage')(
        header=header(image.stamp, image.frame_id), format=suffix[1:],
        data=cv2.imencode(suffix, image.array)[1].reshape(-1))


def state_message(command):
    """Return what the state topic says of a command."""
    pair = kind('diagnostic_msgs/msg/KeyValue')
    return kind('diagnostic_msgs/msg/DiagnosticStatus')(
        level=0, name='controller: state', message=command.state.value, hardware_id='',
        values=[pair(key='reason', value=command.reason.value),
                pair(key='detail', value=command.detail)])


def parameters_message(node, values, stamp, *, changed=False):
    """Return the ParameterEvent with which a node declares, or changes, its parameters."""
    names = {bool: (1, 'bool_value'), int: (2, 'integer_value'), float: (3, 'double_value'),
             str: (4, 'string_value')}
    parameters = []
    for name, value in values.items():
        number, attribute = names[type(value)]
        empty = {'bool_value': False, 'integer_value': 0, 'double_value': 0.0, 'string_value': '',
                 'byte_array_value': np.array([], np.uint8),
                 'bool_array_value': np.array([], bool),
                 'integer_array_value': np.array([], np.int64),
                 'double_array_value': np.array([], float), 'string_array_value': []}
        parameters.append(kind('rcl_interfaces/msg/Parameter')(
            name=name, value=kind('rcl_interfaces/msg/ParameterValue')(
                type=number, **{**empty, attribute: value})))
    return kind('rcl_interfaces/msg/ParameterEvent')(
        stamp=header(stamp, '').stamp, node=node, deleted_parameters=[],
        new_parameters=[] if changed else parameters,
        changed_parameters=parameters if changed else [])


@dataclass
class Run:
    """What a simulated run left: messages (time, topic, type, message) and the bare commands."""

    messages: list = field(default_factory=list)
    commands: list = field(default_factory=list)
    goal: Goal | None = None

    def add(self, time, topic, name, message):
        """Note a message."""
        self.messages.append((time, topic, name, message))


def simulated(seconds=4.0, *, blind=(), silent=(), images='', settings=None, state=True,
              noise=2.0):
    """Return a run of the bare cores before the simulated camera.

    `blind` and `silent` are stretches (from, to), s: nothing seen, nothing sent. `images`: '',
    'raw' or 'compressed'.
    """
    simulator = Simulator(settings_from_mapping(
        SimulatorSettings, {**SIMULATOR, 'camera.noise': noise}), np.random.default_rng(3))
    controller = Controller(settings_from_mapping(ControllerSettings, settings or {}))
    calibration = simulator.calibration
    run, due, said, zeros = Run(), [], None, 0
    controller.graph(1, 1)
    simulator.advance_to(START)
    run.add(START, '/servo/camera_info', 'sensor_msgs/msg/CameraInfo',
            info_message(calibration, START))
    controller.calibrate(Camera.from_calibration(calibration))
    exposed = START
    for tick in range(START + PERIOD, START + round(seconds * 1e9), PERIOD):
        while exposed < tick:
            simulator.advance_to(exposed)
            due.append((exposed + DELAY, _expose(run, simulator, exposed, images, blind)))
            exposed += EXPOSURE
        while due and due[0][0] <= tick:
            time, view = due.pop(0)
            if not _within(time, silent):
                message = cloud_message(view)
                run.add(time, '/servo/features', 'sensor_msgs/msg/PointCloud2', message)
                controller.observe(wire.view_from_cloud(message), time)
        if tick == START + ENGAGED_AT:
            assert controller.engage(True).ok
        command = controller.command(tick)
        simulator.apply(command.twist, tick)
        zeros = ZEROS if command.state in ENGAGED else zeros - 1
        if zeros > 0:
            run.commands.append(command)
            run.add(tick, '/servo/camera_twist', 'geometry_msgs/msg/TwistStamped',
                    twist_message(command.twist, tick))
        if state and (command.state, command.reason) != said:
            said = command.state, command.reason
            run.add(tick, '/servo/controller/state', 'diagnostic_msgs/msg/DiagnosticStatus',
                    state_message(command))
    run.messages.sort(key=lambda message: message[0])
    return run


def home_goal(noise=0.0):
    """Return the goal view, taught without noise from home."""
    simulator = Simulator(settings_from_mapping(SimulatorSettings, {'camera.noise': noise}),
                          np.random.default_rng(3))
    picture = simulator.expose()
    return Goal(picture.image, Camera.from_calibration(picture.calibration),
                np.array([0.0, 0.0, 1.0, 0.42]), None, 'by a test')


def written(folder, messages, *, storage='sqlite3', compression='none', version=9,
            renamed=None):
    """Write messages as a recording and return its folder; `renamed` maps topic to topic."""
    modes = {'none': CompressionMode.NONE, 'message': CompressionMode.MESSAGE,
             'file': CompressionMode.FILE, 'storage': CompressionMode.STORAGE}
    writer = Writer(folder, version=version,
                    storage_plugin=StoragePlugin[storage.upper()])
    writer.set_compression(modes[compression], CompressionFormat.ZSTD)
    connections = {}
    with writer:
        for time, topic, name, message in messages:
            topic = (renamed or {}).get(topic, topic)
            if topic not in connections:
                connections[topic] = writer.add_connection(topic, name, typestore=store())
            data = message if isinstance(message, bytes) else store().serialize_cdr(message, name)
            writer.write(connections[topic], time, data)
    return pathlib.Path(folder)


def _expose(run, simulator, now, images, blind):
    frame = simulator.camera.frame_id
    if images:
        picture = simulator.expose()
        pixels = picture.image.copy()
        if _within(now, blind):
            pixels[:] = 40
        image = Image(pixels, picture.encoding, now, frame)
        if images == 'raw':
            run.add(now + 1_000_000, '/servo/image', 'sensor_msgs/msg/Image',
                    image_message(image))
        else:
            run.add(now + 1_000_000, '/servo/image/compressed', 'sensor_msgs/msg/CompressedImage',
                    compressed_message(image))
    return View.empty(now, frame) if _within(now, blind) else simulator.view()


def _within(time, stretch):
    return bool(stretch) and stretch[0] <= (time - START) / 1e9 < stretch[1]
