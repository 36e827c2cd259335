# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller: engaging, moving, clocks and settings, one behaviour at a time."""

from __future__ import annotations

import numpy as np
import pytest

from servo_nodes.control.controller import Controller
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.values import Reason, State
from tests.control.views import CAMERA, MS, START, Asking, Loop, settings, speed, view

FAST = (0.2, 0.0, 0.0, 0.0, 0.0, 0.0)


def refused(loop):
    answer = loop.controller.engage(True)
    assert not answer.ok and loop.controller.state is State.STANDBY
    return answer.text

def test_before_anything_happened_it_stands_by_at_rest_and_says_what_is_missing():
    controller = Controller(ControllerSettings())
    command = controller.command(START)
    assert command.state is State.STANDBY and not command.twist.vector.any()
    assert command.reason is Reason.NO_CAMERA and 'camera_info' in command.detail
    assert command.decided == START and command.view_stamp is None
    assert command.twist.frame_id == ''


def test_with_everything_in_place_it_stands_by_without_a_reason_and_shows_the_error():
    command = Loop().tick(5)
    assert (command.state, command.reason, command.detail) == (State.STANDBY, Reason.NONE, '')
    assert command.figures['error_px'] == 40.0 and command.figures['points'] == 12
    assert command.figures['latency_ms'] == pytest.approx(30.0)
    assert command.twist.frame_id == CAMERA.frame_id and not command.twist.vector.any()


def test_a_loop_that_is_off_solves_once_for_each_view_and_one_that_is_on_at_each_tick():
    loop = Loop()
    loop.tick(9)
    assert len(loop.servo.solved) == 3
    assert loop.controller.engage(True).ok
    loop.tick(9)
    assert len(loop.servo.solved) == 3 + 9


def test_it_engages_on_a_good_view_even_before_the_first_tick():
    loop = Loop()
    assert refused(loop).startswith('features_silent: no features so far')
    loop.controller.observe(view(START), START)
    assert loop.controller.engage(True).ok and loop.controller.state is State.SERVOING


@pytest.mark.parametrize(('prepare', 'reason'), [
    (lambda c: c.graph(0, 1), 'no_listener: 0 listeners'),
    (lambda c: c.graph(1, 2), 'second_publisher: 2 publishers'),
    (lambda c: c.refuse(Reason.NO_CAMERA, 'camera_info: expected fx > 0, got 0'),
     'no_camera: camera_info: expected fx > 0, got 0'),
    (lambda c: c.refuse(Reason.NO_GOAL, 'features: expected a goal, got none'),
     'no_goal: features: expected a goal, got none'),
    (lambda c: c.observe(view(START + 41 * MS, count=3), START + 41 * MS), 'too_few_points:'),
    (lambda c: c.observe(view(START + 41 * MS, frame_id='x'), START + 41 * MS),
     'camera_mismatch:'),
    (lambda c: c.observe(view(START - 220 * MS), START + 41 * MS), 'features_stale:'),
])
def test_it_refuses_to_engage_while_anything_is_wrong_and_engages_when_it_is_right(
        prepare, reason):
    loop = Loop()
    loop.tick(4)
    prepare(loop.controller)
    assert refused(loop).startswith(reason)
    loop.controller.graph(1, 1)
    loop.controller.calibrate(CAMERA)
    loop.tick(6)
    assert loop.controller.engage(True).ok


def test_it_refuses_without_a_camera_and_with_a_view_that_grew_old():
    loop = Loop(camera=None)
    loop.tick(5)
    assert refused(loop).startswith('no_camera')
    loop = Loop()
    loop.tick(4)
    loop.tick(20, feed=False)
    assert refused(loop).startswith('features_silent')


def test_it_refuses_a_view_that_cannot_tell_the_motion():
    loop = Loop(Asking(condition=5000.0))
    loop.tick(5)
    assert refused(loop).startswith('ill_conditioned: condition 5e+03')


def test_engaging_twice_is_no_new_start_and_disengaging_rests_at_once():
    loop = Loop().engaged()
    assert loop.controller.engage(True).ok and speed(loop.tick())[0] > 0.05
    assert len(loop.servo.began) == 1
    assert loop.controller.engage(False).ok
    command = loop.tick()
    assert command.state is State.STANDBY and not command.twist.vector.any()
    assert loop.controller.engage(False).ok


def test_motion_starts_from_rest_within_the_acceleration_and_reaches_the_cap():
    loop = Loop().engaged(40)
    speeds = [speed(command)[0] for command in loop.commands[4:]]
    assert speeds[0] <= 0.005 * (1 + 1e-9) and max(speeds) == pytest.approx(0.1)
    assert np.diff([0.0, *speeds]).max() <= 0.005 * (1 + 1e-9)
    assert loop.servo.began == [loop.commands[4].decided]


def test_the_servo_is_told_of_every_twist_that_was_sent_in_the_camera_s_frame():
    arm = (0.0, 0.0, 0.1, 0.0, 0.0, 1.0, 0.0)
    loop = Loop(output__frame='tool0', output__from_camera=arm).engaged()
    command = loop.commands[-1]
    when, sent = loop.servo.recorded[-1]
    assert when == command.decided and command.twist.frame_id == 'tool0'
    np.testing.assert_allclose(command.twist.vector, (-sent[0], *sent[1:]), atol=1e-12)
    assert sent[0] == pytest.approx(0.1)


def test_a_late_tick_gives_no_leap():
    loop = Loop(caps__linear_acceleration=0.2).engaged(3)
    before = speed(loop.commands[-1])[0]
    loop.now += 50 * MS
    assert speed(loop.tick())[0] - before <= 0.2 * 0.02 * (1 + 1e-9)


def test_the_ratio_says_how_much_of_the_law_the_caps_let_through():
    command = Loop().engaged().commands[-1]
    assert command.figures['ratio'] == pytest.approx(0.5)


def test_small_errors_for_a_while_are_settled_and_the_loop_goes_on_regulating():
    loop = Loop().at_home().engaged(80)
    assert loop.controller.state is State.SETTLED and speed(loop.commands[-1])[0] > 0
    first = next(c for c in loop.commands if c.state is State.SETTLED)
    assert first.decided - loop.servo.began[0] == 500 * MS
    loop.servo.twist, loop.servo.error_px = FAST, 40.0
    assert loop.tick(3).state is State.SERVOING
    assert speed(loop.tick(30))[0] == pytest.approx(0.1)


def test_a_law_that_asks_for_nothing_is_not_believed_to_be_home():
    loop = Loop().at_home()
    loop.shift = (5e-3, 0.0)
    assert loop.engaged(200).controller.state is State.SERVOING


def test_points_at_the_border_slow_the_loop_down_and_say_so():
    edge = np.r_[np.zeros((6, 2)), np.full((6, 2), (-0.53, 0.0))]
    loop = Loop(Asking((0.09, 0, 0, 0, 0, 0))).engaged()
    points = edge + 1e-5 * np.arange(24).reshape(12, 2)
    for k in range(60):
        command = loop.tick(points_xy=points + 1e-6 * k)
    assert (command.state, command.reason) == (State.SERVOING, Reason.LEAVING_VIEW)
    assert '50 % of the points' in command.detail
    assert speed(command)[0] == pytest.approx(0.09 * (0.7 - 0.5) / 0.3)
    for k in range(60):
        command = loop.tick(points_xy=np.full((12, 2), (-0.53, 0.0)) + 1e-6 * k)
    assert (command.state, command.reason) == (State.HOLDING, Reason.LEAVING_VIEW)


def test_a_clock_that_jumps_stands_by_at_rest_and_needs_engaging_again():
    loop = Loop().engaged(40)
    loop.controller.jump()
    command = loop.tick()
    assert (command.state, command.reason) == (State.STANDBY, Reason.CLOCK_JUMP)
    assert not command.twist.vector.any()
    command = loop.tick(30)
    assert (command.state, command.reason) == (State.STANDBY, Reason.CLOCK_JUMP)
    assert loop.controller.engage(True).ok
    assert loop.tick(30).reason is Reason.NONE


def test_time_that_runs_backward_is_a_jump_and_a_new_time_line_is_accepted():
    loop = Loop().engaged(40)
    loop.now -= 300 * MS
    command = loop.tick()
    assert (command.state, command.reason) == (State.STANDBY, Reason.CLOCK_JUMP)
    loop.tick(5)
    assert loop.controller.engage(True).ok


def test_a_jump_does_not_excuse_a_fault():
    loop = Loop().engaged()
    loop.controller.graph(0, 1)
    loop.tick()
    loop.controller.jump()
    assert loop.tick().reason is Reason.NO_LISTENER
    loop = Loop().engaged()
    loop.controller.jump()
    loop.controller.halt(True)
    assert loop.tick().reason is Reason.HALTED


def test_settings_are_swapped_as_a_whole_and_act_at_once():
    loop = Loop().engaged(40)
    assert loop.controller.adopt(settings(caps__linear=0.03, law__gain=2.0)).ok
    assert speed(loop.tick())[0] <= 0.03 * (1 + 1e-9)
    assert loop.servo.settings.gain == 2.0 and loop.controller.settings.caps.linear == 0.03
    assert loop.controller.adopt(settings(watchdog__timeout=0.5, watchdog__staleness=1.0)).ok
    assert loop.tick(40, feed=False).state is State.SERVOING
    assert loop.tick(30, feed=False).state is State.HOLDING


@pytest.mark.parametrize('change', [
    {'rate': 50.0}, {'caps__hard_linear': 0.2}, {'caps__hard_angular': 1.0},
    {'output__frame': 'tool0', 'output__from_camera': (0, 0, 0.1, 0, 0, 0, 1)}])
def test_what_is_fixed_cannot_change_while_running(change):
    loop = Loop().engaged(40)
    answer = loop.controller.adopt(settings(**change))
    name = list(change)[0].replace('__', '.')
    assert not answer.ok and answer.text.startswith(f'{name}: expected ')
    assert 'to stay while running' in answer.text
    assert speed(loop.tick())[0] == pytest.approx(0.1)


def test_what_was_dropped_is_counted_by_reason():
    loop = Loop(period=1)
    loop.tick(5, count=0)
    loop.tick(2)
    assert loop.controller.dropped == {Reason.TOO_FEW_POINTS: 5}
    assert loop.commands[-1].figures['dropped'] == 5.0
