# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Wire: every message there and back, and every malformed field refused by its name.

The messages are the real ones where ROS 2 is installed, and always look-alikes with the same
attributes, because the room promises to need no more than that.
"""

from __future__ import annotations

import array

import message_shapes
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from servo_nodes import wire
from servo_nodes.values import Calibration, Image, Twist

STAND_INS = message_shapes.look_alikes()


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
