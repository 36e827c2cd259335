# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The parts of the shells that need no second process."""

from __future__ import annotations

import threading
import types

import cv2
import numpy as np
import pytest
from rcl_interfaces.msg import ParameterType

from servo_nodes.ros import diagnostics
from servo_nodes.ros.intake import image_from_compressed
from servo_nodes.ros.limiter import Limiter
from servo_nodes.ros.meters import Arrivals, Durations
from servo_nodes.ros.pacer import Pacer
from servo_nodes.ros.parameters import descriptor
from servo_nodes.ros.sender import MOST_IN_A_ROW, Sender
from servo_nodes.ros.timeline import Timeline
from servo_nodes.settings import Checked, definitions, setting
from servo_nodes.values import Twist

MS = 1_000_000


class Fake:
    """A clock that is set by hand."""

    def __init__(self):
        self.now = 10 ** 12

    def __call__(self):
        return self.now


def test_a_limiter_says_a_thing_once_per_period_and_counts_the_rest():
    clock = Fake()
    limiter = Limiter(5.0, clock)
    assert limiter.passed('a', 'words') == 'words'
    assert limiter.passed('b', 'other words') == 'other words'
    for _ in range(7):
        clock.now += 500 * MS
        assert limiter.passed('a', 'words') is None
    clock.now += 2000 * MS
    assert limiter.passed('a', 'words') == 'words (7 more like this were not shown)'
    clock.now += 5000 * MS
    assert limiter.passed('a', 'words') == 'words'


def test_a_stamp_keeps_its_age_on_the_steady_clock():
    line = Timeline()
    assert line.steady(stamp=990, node_now=1000, steady_now=70) == 60
    assert line.steady(stamp=1100, node_now=1000, steady_now=90) == 190


def test_the_same_stamp_stays_the_same_and_order_is_kept_though_the_clocks_jitter():
    line = Timeline()
    first = line.steady(1000 * MS, 1010 * MS, 50 * MS)
    assert line.steady(1000 * MS, 1010 * MS + 7, 50 * MS + 9) == first
    later = line.steady(1000 * MS + 1, 1010 * MS, 50 * MS - 30)
    assert later == first + 1
    assert line.steady(999 * MS, 1010 * MS, 60 * MS) < later


def test_a_stamp_of_zero_stays_zero():
    assert Timeline().steady(0, 10 ** 18, 10 ** 9) == 0


def test_a_set_clock_costs_at_most_one_view_its_order():
    """After the system clock was set back by 3 s, the second view is in order again."""
    line = Timeline()
    before = line.steady(100_000 * MS, 100_010 * MS, 5000 * MS)
    line.steady(97_033 * MS, 97_043 * MS, 5033 * MS)
    after = line.steady(97_066 * MS, 97_076 * MS, 5066 * MS)
    assert after > before and after == 5056 * MS


def test_lost_images_are_read_from_the_gaps_between_stamps():
    """Every fifth of 30 Hz missing: a fifth is lost; jitter of a tenth period: none is."""
    whole, holes = Arrivals(), Arrivals()
    rng = np.random.default_rng(5)
    for i in range(100):
        stamp = round((i + 0.1 * rng.uniform(-1, 1)) * 1e9 / 30)
        whole.add(stamp, stamp, 5 * MS)
        if i % 5:
            holes.add(stamp, stamp, 5 * MS)
    assert whole.loss() < 0.01
    assert holes.loss() == pytest.approx(0.2, abs=0.02)
    assert whole.rate(round(100e9 / 30)) == pytest.approx(30, rel=0.02)


def test_silence_without_any_message_is_endless():
    assert Arrivals().silence(10 ** 9) == float('inf')


def test_durations_report_their_spread():
    durations = Durations('work')
    assert durations.figures() == {}
    for milliseconds in range(1, 101):
        durations.add(milliseconds * MS)
    figures = durations.figures()
    assert figures['work_ms_max'] == 100 and figures['work_ms_p50'] == pytest.approx(50.5)


def test_a_pacer_does_not_make_up_for_what_it_missed():
    """After a tick that took five periods the next come one period apart, and say how late."""
    ticks, ended = [], threading.Event()

    def tick(now, late):
        ticks.append((now, late))
        if len(ticks) == 3:
            threading.Event().wait(0.1)
        if len(ticks) == 6:
            ended.set()
    pacer = Pacer(50.0, tick, lambda error: ended.set())
    pacer.start()
    assert ended.wait(5.0)
    pacer.end()
    assert ticks[3][1] >= 60 * MS
    assert ticks[4][0] - ticks[3][0] >= 19 * MS


def test_a_pacer_hands_an_exception_to_its_owner():
    caught, ended = [], threading.Event()

    def failed(error):
        caught.append(error)
        ended.set()

    def tick(now, late):
        raise ZeroDivisionError('no')
    Pacer(100.0, tick, failed).start()
    assert ended.wait(5.0) and isinstance(caught[0], ZeroDivisionError)



def test_a_descriptor_says_type_unit_range_and_whether_it_is_fixed():
    import dataclasses

    @dataclasses.dataclass(frozen=True)
    class Options(Checked):
        speed: float = setting(0.1, unit='m/s', low=0.0, high=1.0, help='how fast')
        count: int = setting(3, low=1, high=9, fixed=True, help='how many')
        axes: tuple = setting((1.0,), lengths=(1, 2), low=0.0, help='which')
        kind: str = setting('a', choices=('a', 'b'), help='which kind')
    known = definitions(Options)
    speed = descriptor(known['speed'])
    assert speed.type == ParameterType.PARAMETER_DOUBLE and speed.description == 'how fast [m/s]'
    assert speed.floating_point_range[0].to_value == 1.0 and not speed.read_only
    count = descriptor(known['count'])
    assert count.read_only and count.integer_range[0].from_value == 1
    assert '1 or 2 finite numbers' in descriptor(known['axes']).additional_constraints
    assert descriptor(known['kind']).additional_constraints == 'expected one of a, b'


def test_the_same_parameters_have_the_same_hash_and_others_another():
    one = diagnostics.parameter_hash({'a': 1.0, 'b': (1.0, 2.0)})
    assert one == diagnostics.parameter_hash({'b': (1.0, 2.0), 'a': 1.0})
    assert one != diagnostics.parameter_hash({'a': 1.5, 'b': (1.0, 2.0)})


def test_figures_that_are_not_finite_are_left_out_of_the_diagnostics():
    line = diagnostics.status('n', level=diagnostics.OK, text='t', hardware_id='h',
                              values={'good': 1.0, 'bad': float('nan'), 'worse': float('inf')})
    assert [item.key for item in line.values] == ['good']


def compressed(data, stamp=5):
    """Return what looks like a CompressedImage."""
    header = types.SimpleNamespace(stamp=types.SimpleNamespace(sec=0, nanosec=stamp),
                                   frame_id='camera')
    return types.SimpleNamespace(data=bytes(data), header=header)


@pytest.mark.parametrize(('kind', 'shape', 'encoding'), [
    ('.png', (48, 64), 'mono8'), ('.jpg', (48, 64, 3), 'bgr8'), ('.png', (48, 64, 3), 'bgr8')])
def test_jpeg_and_png_become_images(kind, shape, encoding):
    pixels = np.random.default_rng(1).integers(0, 255, shape, np.uint8)
    image = image_from_compressed(compressed(cv2.imencode(kind, pixels)[1]))
    assert image.encoding == encoding and image.array.shape == shape
    assert (image.stamp, image.frame_id) == (5, 'camera')


def huge_png():
    """Return the head of a PNG that claims 60000 x 60000 px."""
    data = bytearray(cv2.imencode('.png', np.zeros((4, 4), np.uint8))[1].tobytes())
    data[16:24] = (60000).to_bytes(4, 'big') * 2
    return data


@pytest.mark.parametrize(('data', 'words'), [
    (b'', 'expected 1 to'), (b'GIF89a' + bytes(100), 'expected a JPEG or a PNG'),
    (huge_png(), 'got 60000x60000 px'), (b'\xff\xd8\xff\xe0', 'expected a JPEG or a PNG')])
def test_what_is_no_sound_picture_is_refused_before_it_is_unpacked(data, words):
    with pytest.raises(ValueError, match=words):
        image_from_compressed(compressed(data))


class Refusing:
    """A publisher that takes a message only when it is told to."""

    def __init__(self):
        self.takes, self.sent = True, []

    def publish(self, message):
        if not self.takes:
            raise RuntimeError('cannot publish data')
        self.sent.append(message)


class Listening:
    """As much of a node as a sender needs."""

    def __init__(self):
        self.words = []

    def now_ns(self):
        return 5

    def warn_seldom(self, key, text):
        self.words.append(text)


def test_a_command_the_middleware_refuses_is_lost_and_the_next_one_goes_out():
    node, publisher = Listening(), Refusing()
    sender = Sender(node, publisher)
    publisher.takes = False
    for _ in range(MOST_IN_A_ROW - 1):
        sender.send(Twist([0.1, 0, 0, 0, 0, 0], 'camera'))
    assert sender.refused == MOST_IN_A_ROW - 1 and not publisher.sent
    assert 'expected the middleware to take every command' in node.words[0]
    publisher.takes = True
    sender.send_zero()
    assert publisher.sent[0].header.frame_id == 'camera'
    assert publisher.sent[0].twist.linear.x == 0.0


def test_a_middleware_that_takes_nothing_any_more_ends_the_node():
    publisher = Refusing()
    publisher.takes = False
    sender = Sender(Listening(), publisher)
    with pytest.raises(RuntimeError, match='cannot publish'):
        for _ in range(MOST_IN_A_ROW):
            sender.send(Twist.zero('camera'))
