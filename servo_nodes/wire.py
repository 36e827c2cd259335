# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""ROS message shapes <-> values, both directions, by attribute only: no ROS is imported.

Reading functions are `value_from_message`; writing ones fill a message the caller made, and take
the classes of nested messages where they must make some. Times are converted here and nowhere
else, by integers. Every refusal is a `ValueError` that names the field.
"""

from __future__ import annotations

import array
import sys
import typing
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from servo_nodes.values import SECOND_NS, Calibration, Floats, Image, Stamp, Twist, View

MAX_IMAGE_SIDE = 16384
MAX_IMAGE_BYTES = 128 * 1024 * 1024
MAX_POINTS = 20000

# Encodings of sensor_msgs/image_encodings: numpy type and channels per pixel.
ENCODINGS: dict[str, tuple[str, int]] = {
    'mono8': ('u1', 1), '8UC1': ('u1', 1), 'mono16': ('u2', 1), '16UC1': ('u2', 1),
    'bgr8': ('u1', 3), 'rgb8': ('u1', 3), '8UC3': ('u1', 3),
    'bgra8': ('u1', 4), 'rgba8': ('u1', 4), '8UC4': ('u1', 4), '32FC1': ('f4', 1),
    **{f'bayer_{order}8': ('u1', 1) for order in ('rggb', 'bggr', 'gbrg', 'grbg')},
    **{f'bayer_{order}16': ('u2', 1) for order in ('rggb', 'bggr', 'gbrg', 'grbg')},
    'yuv422': ('u1', 2), 'uyvy': ('u1', 2), 'yuv422_yuy2': ('u1', 2), 'yuyv': ('u1', 2),
}

FLOAT32, UINT32 = 7, 6
FIELDS = ('x', 'y', 'z', 'xn', 'yn', 'xn_goal', 'yn_goal', 'z_goal', 'weight', 'id')
_CLOUD = np.dtype([(name, '<u4' if name == 'id' else '<f4') for name in FIELDS])


def stamp_from_time(time: typing.Any) -> Stamp:
    """Return ns of a builtin_interfaces/Time.

    Raises
    ------
    ValueError
        For negative seconds or nanoseconds beyond a second.
    """
    if time.sec < 0 or not 0 <= time.nanosec < SECOND_NS:
        raise ValueError(f'stamp: expected sec >= 0 and nanosec below 1e9, got {time.sec}, '
                         f'{time.nanosec}')
    return int(time.sec) * SECOND_NS + int(time.nanosec)


def fill_time(time: typing.Any, stamp: Stamp) -> None:
    """Write a stamp, ns, into a builtin_interfaces/Time."""
    time.sec, time.nanosec = divmod(int(stamp), SECOND_NS)


def image_from_message(message: typing.Any) -> Image:
    """Return the pixels of a sensor_msgs/Image without copying where the bytes allow it.

    Padded rows (a `step` beyond the row's bytes) and foreign byte order are accepted.

    Raises
    ------
    ValueError
        For an encoding, size, step or length of data that cannot be an image.
    """
    encoding = str(message.encoding)
    if encoding not in ENCODINGS:
        raise ValueError(f'image encoding: expected one of {", ".join(ENCODINGS)}, '
                         f'got {encoding!r}')
    code, channels = ENCODINGS[encoding]
    width, height, step = int(message.width), int(message.height), int(message.step)
    if not (1 <= width <= MAX_IMAGE_SIDE and 1 <= height <= MAX_IMAGE_SIDE):
        raise ValueError(f'image size: expected 1 to {MAX_IMAGE_SIDE} px a side, '
                         f'got {width}x{height}')
    item = np.dtype(code).newbyteorder('>' if message.is_bigendian else '<')
    row = width * channels * item.itemsize
    if step < row or step % item.itemsize:
        raise ValueError(f'image step: expected at least {row} bytes for {width} px of '
                         f'{encoding}, a multiple of {item.itemsize}, got {step}')
    if step * height > MAX_IMAGE_BYTES:
        raise ValueError(f'image size: expected at most {MAX_IMAGE_BYTES} bytes, '
                         f'got {step * height}')
    data = np.frombuffer(message.data, dtype=np.uint8)
    needed = step * (height - 1) + row
    if data.size < needed:
        raise ValueError(f'image data: expected at least {needed} bytes for {width}x{height} '
                         f'{encoding}, got {data.size}')
    shape = (height, width) if channels == 1 else (height, width, channels)
    strides: tuple[int, ...] = (step, channels * item.itemsize, item.itemsize)
    pixels: npt.NDArray[typing.Any] = np.ndarray(shape, item, data, strides=strides[:len(shape)])
    return Image(pixels, encoding, stamp_from_time(message.header.stamp),
                 str(message.header.frame_id))


def fill_image(message: typing.Any, image: Image) -> None:
    """Write an image into a sensor_msgs/Image; `array('B').frombytes` is the cheap way in."""
    pixels = np.ascontiguousarray(image.array, image.array.dtype.newbyteorder('='))
    fill_time(message.header.stamp, image.stamp)
    message.header.frame_id = image.frame_id
    message.height, message.width = pixels.shape[:2]
    message.encoding = image.encoding
    message.is_bigendian = int(sys.byteorder == 'big')
    message.step = pixels.strides[0]
    data = array.array('B')
    data.frombytes(pixels.data.cast('B'))
    message.data = data


def calibration_from_message(message: typing.Any) -> Calibration:
    """Return the content of a sensor_msgs/CameraInfo; the camera judges whether it is usable."""
    roi = message.roi
    return Calibration(
        frame_id=str(message.header.frame_id),
        width=int(message.width), height=int(message.height),
        model=str(message.distortion_model), d=_floats(message.d), k=_floats(message.k),
        r=_floats(message.r), p=_floats(message.p),
        binning=(int(message.binning_x), int(message.binning_y)),
        roi=(int(roi.x_offset), int(roi.y_offset), int(roi.width), int(roi.height)))


def fill_camera_info(message: typing.Any, calibration: Calibration, stamp: Stamp) -> None:
    """Write a calibration into a sensor_msgs/CameraInfo."""
    fill_time(message.header.stamp, stamp)
    message.header.frame_id = calibration.frame_id
    message.width, message.height = calibration.width, calibration.height
    message.distortion_model = calibration.model
    message.d = list(calibration.d)
    message.k, message.r = list(calibration.k), list(calibration.r)
    message.p = list(calibration.p or _projection(calibration.k))
    message.binning_x, message.binning_y = calibration.binning
    roi = message.roi
    roi.x_offset, roi.y_offset, roi.width, roi.height = calibration.roi


def view_from_cloud(message: typing.Any) -> View:
    """Return the view of a `features` PointCloud2.

    Fields are found by name, so that other publishers may add or reorder some; numbers are not
    judged here (NaN depths are meant, other non-finite values are the gate's to refuse).

    Raises
    ------
    ValueError
        For missing fields, wrong types, or a length that does not fit.
    """
    stamp = stamp_from_time(message.header.stamp)
    frame_id = str(message.header.frame_id)
    count, step = int(message.width) * int(message.height), int(message.point_step)
    if count == 0:
        return View.empty(stamp, frame_id)
    if count > MAX_POINTS:
        raise ValueError(f'features: expected at most {MAX_POINTS} points, got {count}')
    if message.height > 1 and message.row_step != message.width * step:
        raise ValueError(f'features row_step: expected {message.width * step} bytes, rows without '
                         f'padding, got {message.row_step}')
    if len(message.data) < count * step:
        raise ValueError(f'features data: expected {count * step} bytes for {count} points, '
                         f'got {len(message.data)}')
    rows = np.frombuffer(message.data, _cloud_type(message), count)
    return View(stamp, frame_id, _pair(rows, 'xn', 'yn'), _pair(rows, 'xn_goal', 'yn_goal'),
                rows['z'], rows['z_goal'], rows['weight'], rows['id'])


def _cloud_type(message: typing.Any) -> np.dtype[typing.Any]:
    """Return the structured type of the fields we read, at the offsets the message gives."""
    given = {str(field.name): field for field in message.fields}
    for name in FIELDS:
        want = UINT32 if name == 'id' else FLOAT32
        if name not in given:
            raise ValueError(f'features: expected a field {name!r}, '
                             f'got {", ".join(given) or "none"}')
        if given[name].datatype != want or given[name].offset + 4 > message.point_step:
            raise ValueError(f'features field {name}: expected datatype {want} inside a point of '
                             f'{message.point_step} bytes, got datatype {given[name].datatype} at '
                             f'{given[name].offset}')
    order = '>' if message.is_bigendian else '<'
    return np.dtype({'names': list(FIELDS),
                     'formats': [order + ('u4' if name == 'id' else 'f4') for name in FIELDS],
                     'offsets': [int(given[name].offset) for name in FIELDS],
                     'itemsize': int(message.point_step)})


def fill_cloud(message: typing.Any, view: View, point_field: typing.Any) -> None:
    """Write a view into a `features` PointCloud2; `point_field` is the class of its fields."""
    fill_time(message.header.stamp, view.stamp)
    message.header.frame_id = view.frame_id
    message.fields = [
        point_field(name=name, offset=_CLOUD.fields[name][1], count=1,  # type: ignore[index]
                    datatype=UINT32 if name == 'id' else FLOAT32) for name in FIELDS]
    rows = np.empty(len(view), _CLOUD)
    rows['xn'], rows['yn'] = view.points_xy.T
    rows['xn_goal'], rows['yn_goal'] = view.goal_xy.T
    rows['z'], rows['z_goal'] = view.depths, view.goal_depths
    rows['x'], rows['y'] = view.points_xy.T * view.depths
    rows['weight'], rows['id'] = view.weights, view.ids
    message.height, message.width = 1, len(view)
    message.is_bigendian = False
    message.point_step, message.row_step = _CLOUD.itemsize, _CLOUD.itemsize * len(view)
    message.is_dense = bool(np.isfinite(view.depths).all())
    data = array.array('B')
    data.frombytes(rows.tobytes())
    message.data = data


def twist_from_message(message: typing.Any) -> Twist:
    """Return the twist of a geometry_msgs/TwistStamped; finiteness is the reader's to judge."""
    linear, angular = message.twist.linear, message.twist.angular
    return Twist(np.array([linear.x, linear.y, linear.z, angular.x, angular.y, angular.z]),
                 str(message.header.frame_id))


def fill_twist(message: typing.Any, twist: Twist, stamp: Stamp) -> None:
    """Write a twist into a geometry_msgs/TwistStamped."""
    fill_time(message.header.stamp, stamp)
    message.header.frame_id = twist.frame_id
    linear, angular = message.twist.linear, message.twist.angular
    linear.x, linear.y, linear.z, angular.x, angular.y, angular.z = map(float, twist.vector)


def fill_pose(pose: typing.Any, translation: npt.ArrayLike,
              quaternion_xyzw: npt.ArrayLike) -> None:
    """Write a translation (3,), m, and a quaternion x, y, z, w into a geometry_msgs/Pose."""
    position, orientation = pose.position, pose.orientation
    position.x, position.y, position.z = map(float, np.asarray(translation))
    orientation.x, orientation.y, orientation.z, orientation.w = map(
        float, np.asarray(quaternion_xyzw))


def parts_from_pose(pose: typing.Any) -> tuple[Floats, Floats]:
    """Return the translation (3,), m, and quaternion (4,) x, y, z, w of a geometry_msgs/Pose."""
    position, orientation = pose.position, pose.orientation
    return (np.array([position.x, position.y, position.z]),
            np.array([orientation.x, orientation.y, orientation.z, orientation.w]))


def fill_status(status: typing.Any, *, level: bytes, name: str, text: str, hardware_id: str,
                values: Mapping[str, object], key_value: typing.Any) -> None:
    """Write a diagnostic_msgs/DiagnosticStatus; `key_value` is the class of its values."""
    status.level, status.name, status.message, status.hardware_id = level, name, text, hardware_id
    status.values = [key_value(key=key, value=_text(value)) for key, value in values.items()]


def _text(value: object) -> str:
    return f'{value:.6g}' if isinstance(value, float) else str(value)


def _floats(numbers: typing.Any) -> tuple[float, ...]:
    return tuple(float(number) for number in numbers)


def _pair(rows: npt.NDArray[typing.Any], first: str, second: str) -> Floats:
    return np.stack([rows[first], rows[second]], axis=-1).astype(np.float64)


def _projection(k: tuple[float, ...]) -> tuple[float, ...]:
    return (*k[0:3], 0.0, *k[3:6], 0.0, *k[6:9], 0.0)
