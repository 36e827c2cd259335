# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Wire: every message there and back, and every malformed field refused by its name.

The messages are the real ones where ROS 2 is installed, and always look-alikes with the same
attributes, because the room promises to need no more than that.
"""

from __future__ import annotations

import array
import struct
import types

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from servo_nodes import wire
from servo_nodes.values import Calibration, Image, Twist, View


def _look_alikes() -> types.SimpleNamespace:
    """Return makers of objects shaped like the messages."""
    space = types.SimpleNamespace

    def header():
        return space(stamp=space(sec=0, nanosec=0), frame_id='')

    def vector():
        return space(x=0.0, y=0.0, z=0.0)
    return space(
        Time=lambda: space(sec=0, nanosec=0),
        Image=lambda: space(header=header(), height=0, width=0, encoding='', is_bigendian=0,
                            step=0, data=b''),
        CameraInfo=lambda: space(
            header=header(), height=0, width=0, distortion_model='', d=[], k=[0.0] * 9,
            r=[0.0] * 9, p=[0.0] * 12, binning_x=0, binning_y=0,
            roi=space(x_offset=0, y_offset=0, height=0, width=0, do_rectify=False)),
        PointCloud2=lambda: space(header=header(), height=0, width=0, fields=[],
                                  is_bigendian=False, point_step=0, row_step=0, data=b'',
                                  is_dense=False),
        PointField=space,
        TwistStamped=lambda: space(header=header(),
                                   twist=space(linear=vector(), angular=vector())),
        Pose=lambda: space(position=vector(), orientation=space(x=0.0, y=0.0, z=0.0, w=1.0)),
        DiagnosticStatus=lambda: space(level=b'\0', name='', message='', hardware_id='',
                                       values=[]),
        KeyValue=space)


def _real() -> types.SimpleNamespace:
    """Return the classes of the real messages, or skip."""
    pytest.importorskip('rclpy', reason='no ROS 2 here: the look-alikes stand in')
    from builtin_interfaces.msg import Time
    from diagnostic_msgs.msg import DiagnosticStatus, KeyValue
    from geometry_msgs.msg import Pose, TwistStamped
    from sensor_msgs.msg import CameraInfo, Image, PointCloud2, PointField
    return types.SimpleNamespace(**{cls.__name__: cls for cls in (
        Time, DiagnosticStatus, KeyValue, Pose, TwistStamped, CameraInfo, Image, PointCloud2,
        PointField)})


@pytest.fixture(params=['look_alike', 'real'])
def messages(request) -> types.SimpleNamespace:
    """Return makers of messages, of both kinds in turn."""
    return _look_alikes() if request.param == 'look_alike' else _real()


STAND_INS = _look_alikes()


@given(st.integers(0, 2 ** 31 * 10 ** 9 - 1))
def test_stamps_keep_every_nanosecond(stamp):
    time = STAND_INS.Time()
    wire.fill_time(time, stamp)
    assert wire.stamp_from_time(time) == stamp


def test_stamps_of_the_real_message_keep_every_nanosecond(messages):
    """A float of seconds since 1970 would resolve 238 ns only."""
    time = messages.Time()
    wire.fill_time(time, 1_750_000_000_123_456_789)
    assert (time.sec, time.nanosec) == (1_750_000_000, 123_456_789)
    assert wire.stamp_from_time(time) == 1_750_000_000_123_456_789


@pytest.mark.parametrize(('sec', 'nanosec'), [(-1, 0), (0, 1_000_000_000), (5, 4_000_000_000)])
def test_an_impossible_stamp_is_refused(messages, sec, nanosec):
    time = messages.Time()
    time.sec, time.nanosec = sec, nanosec
    with pytest.raises(ValueError, match='stamp: expected sec >= 0 and nanosec below 1e9, got'):
        wire.stamp_from_time(time)


@pytest.mark.parametrize('encoding', sorted(wire.ENCODINGS))
def test_images_of_every_encoding_come_back(messages, encoding):
    code, channels = wire.ENCODINGS[encoding]
    shape = (5, 6) if channels == 1 else (5, 6, channels)
    pixels = np.random.default_rng(2).integers(0, 250, shape).astype(code)
    message = messages.Image()
    wire.fill_image(message, Image(pixels, encoding, 12_000_000_034, 'eye'))
    assert (message.height, message.width) == (5, 6)
    assert message.step == 6 * channels * pixels.itemsize
    back = wire.image_from_message(message)
    assert_array_equal(back.array, pixels)
    assert (back.encoding, back.stamp, back.frame_id) == (encoding, 12_000_000_034, 'eye')


def image_message(messages, **changes):
    """Return a 4x3 bgr8 message, with changes."""
    message = messages.Image()
    pixels = np.arange(36, dtype=np.uint8).reshape(3, 4, 3)
    wire.fill_image(message, Image(pixels, 'bgr8', 1, 'eye'))
    for name, value in changes.items():
        setattr(message, name, value)
    return message


def test_pixels_are_read_where_they_lie(messages):
    message = image_message(messages)
    pixels = wire.image_from_message(message).array
    message.data[0] = 77
    assert pixels[0, 0, 0] == 77


def test_rows_may_be_padded_and_the_last_one_may_lack_its_padding(messages):
    rows = np.random.default_rng(3).integers(0, 255, (3, 20), dtype=np.uint8)
    for length in (60, 2 * 20 + 12):
        message = image_message(messages, step=20,
                                data=array.array('B', rows.tobytes()[:length]))
        assert_array_equal(wire.image_from_message(message).array, rows[:, :12].reshape(3, 4, 3))


def test_images_of_the_other_byte_order_are_read_and_sent_on(messages):
    depth = np.array([[0, 420, 65535], [1, 256, 4660]], np.uint16)
    message = image_message(messages, width=3, height=2, encoding='16UC1', is_bigendian=1, step=6,
                            data=array.array('B', depth.astype('>u2').tobytes()))
    image = wire.image_from_message(message)
    assert_array_equal(image.array, depth)
    again = messages.Image()
    wire.fill_image(again, image)
    assert_array_equal(wire.image_from_message(again).array, depth)


def test_a_view_into_a_larger_picture_can_be_sent(messages):
    whole = np.arange(100, dtype=np.uint8).reshape(10, 10)
    message = messages.Image()
    wire.fill_image(message, Image(whole[2:5, ::2], 'mono8', 1, 'eye'))
    assert_array_equal(wire.image_from_message(message).array, whole[2:5, ::2])


BAD_IMAGES = [
    ({'encoding': 'h264'}, "image encoding: expected one of mono8, .*, got 'h264'"),
    ({'encoding': ''}, "image encoding: expected one of .*, got ''"),
    ({'width': 0}, 'image size: expected 1 to 16384 px a side, got 0x3'),
    ({'height': 0}, 'image size: expected 1 to 16384 px a side, got 4x0'),
    ({'width': 2 ** 31}, 'image size: expected 1 to 16384 px a side'),
    ({'step': 11}, 'image step: expected at least 12 bytes for 4 px of bgr8, .* got 11'),
    ({'step': 0}, 'image step: expected at least 12 bytes'),
    ({'encoding': '16UC1', 'step': 13}, 'image step: expected .* multiple of 2, got 13'),
    ({'height': 16000, 'step': 10 ** 6}, 'image size: expected at most 134217728 bytes'),
    ({'data': array.array('B', bytes(35))}, 'image data: expected at least 36 bytes for 4x3 bgr8, '
                                            'got 35'),
    ({'data': array.array('B')}, 'image data: expected at least 36 bytes'),
]


@pytest.mark.parametrize(('changes', 'sentence'), BAD_IMAGES)
def test_a_malformed_image_is_refused_by_its_field(messages, changes, sentence):
    with pytest.raises(ValueError, match=sentence):
        wire.image_from_message(image_message(messages, **changes))


def test_an_image_with_an_impossible_stamp_is_refused(messages):
    message = image_message(messages)
    message.header.stamp.sec = -3
    with pytest.raises(ValueError, match='stamp: expected sec >= 0'):
        wire.image_from_message(message)


def test_calibrations_come_back(messages):
    sent = Calibration('eye', 640, 480, 'plumb_bob', (0.1, -0.2, 0.0, 0.0, 0.3),
                       (500., 0., 320., 0., 501., 240., 0., 0., 1.),
                       p=(480., 0., 320., -12., 0., 480., 240., 0., 0., 0., 1., 0.),
                       binning=(2, 2), roi=(10, 20, 300, 200))
    message = messages.CameraInfo()
    wire.fill_camera_info(message, sent, 5_000_000_007)
    assert wire.calibration_from_message(message) == sent
    assert wire.stamp_from_time(message.header.stamp) == 5_000_000_007


def test_a_calibration_without_projection_is_sent_with_that_of_its_matrix(messages):
    message = messages.CameraInfo()
    k = (500., 0., 320., 0., 501., 240., 0., 0., 1.)
    wire.fill_camera_info(message, Calibration('eye', 640, 480, 'plumb_bob', (), k), 0)
    assert tuple(message.p) == (500., 0., 320., 0., 0., 501., 240., 0., 0., 0., 1., 0.)


def some_view(count: int, seed: int = 0) -> View:
    """Return a view of `count` points; some depths are unknown."""
    rng = np.random.default_rng(seed)
    depths = rng.uniform(0.3, 0.6, count)
    depths[::3] = np.nan
    return View(77_000_000_001, 'eye', rng.normal(size=(count, 2)), rng.normal(size=(count, 2)),
                depths, rng.uniform(0.3, 0.6, count), rng.uniform(size=count),
                rng.integers(0, 2 ** 32, count))


def cloud_of(messages, view: View):
    """Return the `features` message of a view."""
    message = messages.PointCloud2()
    wire.fill_cloud(message, view, messages.PointField)
    return message


@pytest.mark.parametrize('count', [0, 1, 4, 100])
def test_views_come_back_in_single_precision(messages, count):
    sent = some_view(count)
    message = cloud_of(messages, sent)
    assert (message.height, message.width) == (1, count)
    assert [field.name for field in message.fields] == list(wire.FIELDS)
    back = wire.view_from_cloud(message)
    assert (back.stamp, back.frame_id) == (sent.stamp, 'eye')
    for name in ('points_xy', 'goal_xy', 'depths', 'goal_depths', 'weights'):
        assert_allclose(getattr(back, name), getattr(sent, name), rtol=1e-6, err_msg=name)
    assert_array_equal(back.ids, sent.ids)


def test_viewers_find_the_points_in_space_and_nan_where_depth_is_unknown(messages):
    sent = some_view(6)
    message = cloud_of(messages, sent)
    xyz = np.frombuffer(message.data, np.float32).reshape(6, -1)[:, :3]
    assert_allclose(xyz[1], [*(sent.points_xy[1] * sent.depths[1]), sent.depths[1]], rtol=1e-6)
    assert np.isnan(xyz[0]).all()
    assert not message.is_dense
    assert message.point_step * 6 == message.row_step == len(message.data)


def test_fields_are_found_by_name_wherever_they_lie_in_either_byte_order(messages):
    """Another publisher may add fields, reorder them, pad its points and swap its bytes."""
    sent = some_view(3, seed=4)
    names = ['intensity', *reversed(wire.FIELDS)]
    columns = {'xn': sent.points_xy[:, 0], 'yn': sent.points_xy[:, 1],
               'xn_goal': sent.goal_xy[:, 0], 'yn_goal': sent.goal_xy[:, 1], 'z': sent.depths,
               'z_goal': sent.goal_depths, 'weight': sent.weights, 'id': sent.ids}
    data = b''
    for i in range(3):
        for name in names:
            value = columns.get(name, np.zeros(3))[i]
            data += struct.pack('>I' if name == 'id' else '>f', value)
        data += b'pad!'
    message = messages.PointCloud2()
    message.header.frame_id = 'eye'
    message.height, message.width = 1, 3
    message.point_step = 4 * len(names) + 4
    message.row_step = 3 * message.point_step
    message.is_bigendian = True
    message.fields = [messages.PointField(name=name, offset=4 * i, count=1,
                                          datatype=wire.UINT32 if name == 'id' else wire.FLOAT32)
                      for i, name in enumerate(names)]
    message.data = array.array('B', data)
    back = wire.view_from_cloud(message)
    assert_allclose(back.points_xy, sent.points_xy, rtol=1e-6)
    assert_allclose(back.goal_depths, sent.goal_depths, rtol=1e-6)
    assert_array_equal(back.ids, sent.ids)


def test_an_organised_cloud_is_read_row_by_row(messages):
    sent = some_view(6)
    message = cloud_of(messages, sent)
    message.height, message.width, message.row_step = 2, 3, 3 * message.point_step
    assert_array_equal(wire.view_from_cloud(message).ids, sent.ids)
    message.row_step += 4
    with pytest.raises(ValueError, match='features row_step: expected 120 bytes, .* got 124'):
        wire.view_from_cloud(message)


@pytest.mark.parametrize('name', wire.FIELDS)
def test_a_missing_or_mistyped_field_is_named(messages, name):
    message = cloud_of(messages, some_view(2))
    fields = list(message.fields)
    message.fields = [field for field in fields if field.name != name]
    with pytest.raises(ValueError, match=f"features: expected a field '{name}', got x, |got y, "):
        wire.view_from_cloud(message)
    message.fields = fields
    field = next(field for field in message.fields if field.name == name)
    field.datatype = 8
    with pytest.raises(ValueError, match=f'features field {name}: expected datatype [67] inside'):
        wire.view_from_cloud(message)


def test_a_field_outside_its_point_is_refused(messages):
    message = cloud_of(messages, some_view(2))
    fields = list(message.fields)
    fields[4].offset = message.point_step - 2
    message.fields = fields
    with pytest.raises(ValueError, match='features field yn: expected datatype 7 inside'):
        wire.view_from_cloud(message)


def test_a_cloud_of_the_wrong_length_is_refused(messages):
    message = cloud_of(messages, some_view(4))
    message.data = array.array('B', bytes(message.data)[:-1])
    with pytest.raises(ValueError, match='features data: expected 160 bytes for 4 .* got 159'):
        wire.view_from_cloud(message)
    message.width = 30000
    with pytest.raises(ValueError, match='features: expected at most 20000 points, got 30000'):
        wire.view_from_cloud(message)


@given(st.binary(max_size=200), st.integers(0, 50), st.integers(0, 3), st.integers(0, 60),
       st.lists(st.tuples(st.sampled_from(wire.FIELDS), st.integers(0, 60), st.integers(1, 8)),
                max_size=12))
def test_no_cloud_whatever_breaks_the_reader(data, width, height, point_step, fields):
    """It answers with a view or refuses with a ValueError; nothing else comes out."""
    message = STAND_INS.PointCloud2()
    message.width, message.height, message.point_step = width, height, point_step
    message.row_step, message.data = width * point_step, data
    message.fields = [types.SimpleNamespace(name=name, offset=offset, datatype=kind, count=1)
                      for name, offset, kind in fields]
    try:
        view = wire.view_from_cloud(message)
    except ValueError as error:
        assert 'features' in str(error)
    else:
        assert len(view) == width * height


@given(st.binary(max_size=64), st.integers(0, 20), st.integers(0, 20), st.integers(0, 70),
       st.sampled_from(sorted(wire.ENCODINGS)))
def test_no_image_whatever_breaks_the_reader(data, width, height, step, encoding):
    """It answers with pixels or refuses with a ValueError; nothing else comes out."""
    message = STAND_INS.Image()
    message.width, message.height, message.step = width, height, step
    message.encoding, message.data = encoding, data
    try:
        image = wire.image_from_message(message)
    except ValueError as error:
        assert str(error).startswith('image ')
    else:
        assert image.array.shape[:2] == (height, width)
        image.array.sum()


def test_twists_come_back(messages):
    message = messages.TwistStamped()
    wire.fill_twist(message, Twist([0.1, -0.2, 0.3, 0.4, -0.5, 0.6], 'eye'), 3_000_000_001)
    assert message.twist.angular.y == -0.5
    back = wire.twist_from_message(message)
    assert_array_equal(back.vector, [0.1, -0.2, 0.3, 0.4, -0.5, 0.6])
    assert back.frame_id == 'eye'
    assert wire.stamp_from_time(message.header.stamp) == 3_000_000_001


def test_poses_come_back_with_w_last(messages):
    pose = messages.Pose()
    wire.fill_pose(pose, (1, 2, 3), (0.5, -0.5, 0.1, 0.7))
    assert (pose.orientation.x, pose.orientation.w) == (0.5, 0.7)
    translation, quaternion = wire.parts_from_pose(pose)
    assert_array_equal(translation, (1, 2, 3))
    assert_array_equal(quaternion, (0.5, -0.5, 0.1, 0.7))


def test_a_status_carries_its_values_as_text(messages):
    status = messages.DiagnosticStatus()
    wire.fill_status(status, level=b'\x01', name='controller: loop', text='holding',
                     hardware_id='arm', key_value=messages.KeyValue,
                     values={'error_px': 1.23456789, 'points': 12, 'reason': 'none'})
    assert (status.level, status.name, status.message) == (b'\x01', 'controller: loop', 'holding')
    assert [(pair.key, pair.value) for pair in status.values] == [
        ('error_px', '1.23457'), ('points', '12'), ('reason', 'none')]
