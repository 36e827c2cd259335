# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller: engaging, holding, faulting, starting again, one behaviour at a time."""

from __future__ import annotations

import math

import numpy as np
import pytest

from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.values import Reason, State
from tests.control.views import (
    CAMERA,
    MS,
    OTHER_CAMERA,
    START,
    TICK,
    Asking,
    Loop,
    settings,
    speed,
    view,
)

FAST = (0.2, 0.0, 0.0, 0.0, 0.0, 0.0)


def refused(loop):
    answer = loop.controller.engage(True)
    assert not answer.ok and loop.controller.state is State.STANDBY
    return answer.text


# Engaging ---------------------------------------------------------------------------------------

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
    assert loop.controller.engage(False).ok
    command = loop.tick()
    assert command.state is State.STANDBY and not command.twist.vector.any()
    assert loop.controller.engage(False).ok


# Moving -----------------------------------------------------------------------------------------

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


# Holding ----------------------------------------------------------------------------------------

def test_silence_holds_and_rests_exactly_within_a_quarter_second_of_the_last_message():
    loop = Loop(period=1).engaged(40)
    last = loop.now
    loop.until_rest(feed=False)
    assert (loop.now - last) / 1e9 <= 0.24
    command = loop.commands[-1]
    assert (command.state, command.reason) == (State.HOLDING, Reason.FEATURES_SILENT)
    assert 'at most 0.12 s allowed' in command.detail


def test_a_hold_brakes_straight_within_the_stop_deceleration():
    loop = Loop(Asking((0.06, 0.05, 0, 0, 0, 0.3))).engaged(40)
    loop.controller.observe(view(loop.now, count=0), loop.now)
    first = loop.commands[-1].twist.vector
    loop.until_rest(feed=False)
    braking = [c.twist.vector for c in loop.commands if c.state is State.HOLDING]
    assert 5 <= len(braking) <= 11
    for vector in braking:
        np.testing.assert_allclose(np.outer(vector, first), np.outer(first, vector), atol=1e-12)
    speeds = np.linalg.norm([first, *braking], axis=1)
    linear = np.linalg.norm(np.array([first, *braking])[:, :3], axis=1)
    assert (np.diff(speeds) < 0).all()
    assert -np.diff(linear).min() <= 0.01 * (1 + 1e-9)


def test_after_a_hold_motion_returns_only_after_three_good_views_and_from_rest():
    loop = Loop().engaged(40)
    loop.tick(40, feed=False)
    assert loop.controller.state is State.HOLDING
    loop.count = 0
    moved = None
    for ticks in range(40):
        command = loop.tick()
        if command.twist.vector.any():
            moved = ticks
            break
        assert command.state is State.HOLDING or command.figures['good_views'] >= 3
    assert moved is not None and 6 <= moved <= 8
    assert speed(command)[0] <= 0.005 * (1 + 1e-9)
    assert len(loop.servo.began) == 2
    assert speed(loop.tick(40))[0] == pytest.approx(0.1)


def test_a_bad_view_among_the_good_ones_starts_the_count_anew():
    loop = Loop().engaged(40)
    loop.tick(40, feed=False)
    for _ in range(10):
        for k in range(3):
            loop.now += 3 * TICK
            loop.controller.observe(view(loop.now, count=12 if k < 2 else 0), loop.now)
            assert loop.controller.command(loop.now).state is State.HOLDING


def test_the_ramp_is_finished_before_motion_returns():
    loop = Loop(period=1, caps__stop_deceleration=0.1).engaged(40)
    loop.controller.observe(view(loop.now + 1, count=0), loop.now + TICK)
    assert loop.tick(feed=False).state is State.HOLDING
    speeds = []
    while loop.controller.state is State.HOLDING:
        speeds.append(speed(loop.tick())[0])
    assert len(speeds) > 90 and speeds[-1] == 0.0 and (np.diff(speeds) <= 0).all()


@pytest.mark.parametrize(('disturb', 'reason'), [
    (lambda loop: loop.tick(count=0), Reason.TOO_FEW_POINTS),
    (lambda loop: loop.tick(points_xy=np.full((12, 2), np.nan)), Reason.NOT_FINITE),
    (lambda loop: loop.tick(latency=300 * MS), Reason.FEATURES_STALE),
    (lambda loop: loop.tick(latency=-80 * MS), Reason.STAMP_FUTURE),
    (lambda loop: loop.tick(latency=240 * MS), Reason.STAMP_BACKWARD),
    (lambda loop: (loop.controller.refuse(Reason.NOT_FINITE, 'features: expected xn, got none'),
                   loop.tick(feed=False)), Reason.NOT_FINITE),
    (lambda loop: (loop.controller.overrun(15 * MS), loop.tick()), Reason.OVERRUN),
])
def test_what_may_not_move_the_camera_holds_it_and_lets_go_when_it_is_over(disturb, reason):
    loop = Loop(period=1).engaged(40)
    for _ in range(20):
        disturb(loop)
    command = loop.commands[-1]
    assert (command.state, command.reason) == (State.HOLDING, reason)
    assert not command.twist.vector.any() and ';' in command.detail
    loop.tick(14)
    assert loop.controller.state is State.SERVOING
    assert speed(loop.tick(30))[0] == pytest.approx(0.1)


def test_a_hold_keeps_its_name_however_long_it_lasts():
    loop = Loop().engaged()
    assert {c.reason for c in (loop.tick(count=0) for _ in range(100))} == {
        Reason.NONE, Reason.TOO_FEW_POINTS}


def test_a_stamp_of_zero_is_taken_as_now_or_holds_when_that_is_asked_for():
    loop = Loop(period=1).engaged()
    for _ in range(30):
        loop.now += TICK
        loop.controller.observe(view(0, seed=loop.now), loop.now)
        command = loop.controller.command(loop.now)
    assert command.state is State.SERVOING and loop.controller.dropped[Reason.STAMP_ZERO] == 30
    loop = Loop(period=1, watchdog__zero_stamp='reject').engaged()
    for _ in range(30):
        loop.now += TICK
        loop.controller.observe(view(0, seed=loop.now), loop.now)
        command = loop.controller.command(loop.now)
    assert (command.state, command.reason) == (State.HOLDING, Reason.STAMP_ZERO)


def test_a_repeated_image_holds_as_silence_of_the_camera():
    loop = Loop(period=1).engaged()
    same = view(loop.now)
    for _ in range(30):
        loop.now += TICK
        loop.controller.observe(same, loop.now)
        command = loop.controller.command(loop.now)
    assert (command.state, command.reason) == (State.HOLDING, Reason.IMAGE_SILENT)
    assert not command.twist.vector.any()


def test_a_frozen_picture_rests_within_half_a_second_and_stays_at_rest():
    loop = Loop(period=1).engaged()
    frozen = view(START).points_xy
    start = loop.now
    rest = None
    for _ in range(200):
        command = loop.tick(points_xy=frozen)
        if rest is None and not command.twist.vector.any():
            rest = loop.now - start
        assert rest is None or not command.twist.vector.any()
    assert rest <= 500 * MS
    assert (command.state, command.reason) == (State.HOLDING, Reason.IMAGE_SILENT)
    assert loop.tick(14).state is State.SERVOING


def test_a_paused_process_wakes_up_at_rest_and_stays_there_until_fresh_views_come():
    loop = Loop().engaged(40)
    assert speed(loop.commands[-1])[0] > 0.09
    for k in range(30):
        loop.controller.observe(view(loop.now + k * 33 * MS), loop.now + 2000 * MS)
    loop.now += 2000 * MS
    for _ in range(10):
        command = loop.tick(feed=False)
        assert command.state is State.HOLDING and not command.twist.vector.any()


def test_a_tick_that_is_late_now_and_then_does_not_hold():
    loop = Loop().engaged()
    for k in range(100):
        if k % 6:
            loop.controller.overrun(20 * MS)
        assert loop.tick().state is State.SERVOING


def test_a_heartbeat_is_needed_only_when_asked_for_and_its_loss_holds():
    loop = Loop().engaged()
    assert loop.tick(100).state is State.SERVOING
    loop = Loop(heartbeat__required=True)
    loop.tick(5)
    assert refused(loop).startswith('heartbeat_lost: no heartbeat so far')
    loop.controller.heartbeat(loop.now)
    assert loop.controller.engage(True).ok
    command = loop.tick(70)
    assert (command.state, command.reason) == (State.HOLDING, Reason.HEARTBEAT_LOST)
    for _ in range(15):
        loop.controller.heartbeat(loop.now)
        loop.tick()
    assert loop.controller.state is State.SERVOING


def test_a_law_that_asks_for_no_number_holds_on_the_last_good_twist():
    loop = Loop().engaged(40)
    loop.servo.twist = (math.nan, 0, 0, 0, 0, 0)
    command = loop.tick()
    assert (command.state, command.reason) == (State.HOLDING, Reason.NOT_FINITE)
    assert speed(command)[0] == pytest.approx(0.09)
    loop.until_rest()


def test_the_hold_that_is_left_is_the_most_severe_one_named():
    loop = Loop(heartbeat__required=True)
    loop.controller.heartbeat(START)
    loop.tick(5)
    loop.controller.engage(True)
    assert loop.tick(60, feed=False).reason is Reason.HEARTBEAT_LOST


# Faulting ---------------------------------------------------------------------------------------

FAULTS = [
    (lambda loop: loop.controller.halt(True), Reason.HALTED),
    (lambda loop: loop.controller.graph(0, 1), Reason.NO_LISTENER),
    (lambda loop: loop.controller.graph(1, 2), Reason.SECOND_PUBLISHER),
    (lambda loop: loop.controller.calibrate(OTHER_CAMERA), Reason.CAMERA_MISMATCH),
    (lambda loop: loop.controller.observe(view(loop.now + 1, frame_id='x'), loop.now + TICK),
     Reason.CAMERA_MISMATCH),
    (lambda loop: loop.controller.refuse(Reason.NO_CAMERA, 'k: expected 9 numbers, got 0'),
     Reason.NO_CAMERA),
    (lambda loop: loop.controller.observe(
        view(loop.now + 1, goal_xy=np.full((12, 2), np.nan)), loop.now + TICK), Reason.NO_GOAL),
    (lambda loop: setattr(loop.servo, 'raises', RuntimeError('boom')), Reason.EXCEPTION),
]


@pytest.mark.parametrize(('disturb', 'reason'), FAULTS)
def test_a_fault_is_zero_at_once_and_latched_until_reset_and_engage(disturb, reason):
    loop = Loop(period=1).engaged(40)
    assert speed(loop.commands[-1])[0] > 0.09
    disturb(loop)
    command = loop.tick(feed=False)
    assert (command.state, command.reason) == (State.FAULTED, reason)
    assert not command.twist.vector.any() and ';' in command.detail
    loop.controller.halt(False)
    loop.controller.graph(1, 1)
    loop.controller.calibrate(CAMERA)
    loop.servo.raises = None
    command = loop.tick(30)
    assert (command.state, command.reason) == (State.FAULTED, reason)
    answer = loop.controller.engage(True)
    assert not answer.ok and answer.text == f'{reason.value}: {command.detail}'
    assert loop.controller.engage(False).ok
    assert loop.controller.state is State.FAULTED
    assert loop.controller.reset().ok
    assert loop.controller.state is State.STANDBY and not loop.tick(9).twist.vector.any()
    assert loop.controller.engage(True).ok
    assert speed(loop.tick(30))[0] == pytest.approx(0.1)


def test_a_halt_latches_in_standby_too_and_however_short_it_was():
    loop = Loop()
    loop.tick(5)
    loop.controller.halt(True)
    loop.controller.halt(False)
    assert loop.tick().state is State.FAULTED
    assert loop.controller.reset().ok
    assert loop.tick(5).state is State.STANDBY


def test_a_reset_is_refused_while_the_halt_is_on_and_while_the_loop_is_on():
    loop = Loop().engaged()
    answer = loop.controller.reset()
    assert not answer.ok and 'expected state faulted, got servoing' in answer.text
    assert speed(loop.tick())[0] > 0.05
    loop.controller.halt(True)
    loop.tick()
    answer = loop.controller.reset()
    assert not answer.ok and 'expected the halt input to be false, got true' in answer.text
    assert loop.tick().state is State.FAULTED


def test_a_reset_in_standby_forgets_old_stamps():
    loop = Loop()
    loop.tick(5, latency=0)
    loop.tick(12, latency=200 * MS)
    assert refused(loop).startswith('stamp_backward')
    assert loop.controller.reset().ok
    loop.tick(5, latency=200 * MS)
    assert loop.controller.engage(True).ok


def test_another_camera_in_standby_is_simply_taken():
    loop = Loop()
    loop.controller.calibrate(OTHER_CAMERA)
    loop.tick(5)
    assert loop.controller.engage(True).ok and loop.servo.camera == OTHER_CAMERA
    text = ('camera_info: expected to stay 640x480 px, fx 500, fy 500, cx 319.5, cy 239.5, '
            "plumb_bob [], frame 'camera_optical_frame', got 320x240 px")
    loop.controller.calibrate(Camera(320, 240, 300.0, 300.0, 159.5, 119.5))
    assert text in loop.tick().detail


def test_an_exception_poisons_it_and_is_kept_for_the_log():
    loop = Loop().engaged()
    loop.servo.raises = boom = KeyError('lost')
    command = loop.tick()
    assert command.reason is Reason.EXCEPTION and "KeyError: 'lost'" in command.detail
    assert loop.controller.error is boom
    loop.servo.raises = KeyError('again')
    loop.tick(3)
    assert loop.controller.error is boom
    assert loop.controller.reset().ok and loop.controller.error is None


def test_an_exception_while_engaging_is_an_answer():
    loop = Loop()
    loop.tick(5)
    loop.servo.raises = RuntimeError('boom')
    loop.controller.observe(view(loop.now), loop.now)
    answer = loop.controller.engage(True)
    assert not answer.ok and answer.text.startswith('exception: an error of the program')
    assert loop.controller.state is State.FAULTED
    assert not loop.tick().twist.vector.any()


def test_a_growing_error_is_a_fault():
    loop = Loop().engaged(5)
    for _ in range(400):
        loop.servo.error_px *= 1.005
        command = loop.tick()
        if command.state is State.FAULTED:
            break
    assert command.reason is Reason.DIVERGING and '1.6 s' in command.detail


def test_no_progress_is_a_fault_and_the_time_of_a_hold_does_not_count():
    loop = Loop().engaged(0)
    loop.tick(300)
    loop.tick(400, feed=False)
    loop.tick(300)
    assert loop.controller.state is State.SERVOING
    loop.tick(250)
    assert loop.commands[-1].reason is Reason.STALLED


def test_an_error_within_tolerance_never_stalls():
    loop = Loop(Asking(error_px=0.9), watchdog__travel=100.0).engaged(700)
    assert loop.controller.state is State.SERVOING


def test_a_settled_loop_stalls_only_beyond_the_hysteresis():
    loop = Loop().at_home().engaged(80)
    assert loop.controller.state is State.SETTLED
    loop.servo.error_px = 2.5
    assert loop.tick(700).state is State.SETTLED


def test_the_leash_ends_in_a_fault_and_is_tied_anew_after_it():
    loop = Loop(watchdog__travel=0.2, watchdog__stalled_window=600.0).engaged(260)
    command = loop.commands[-1]
    assert (command.state, command.reason) == (State.FAULTED, Reason.TRAVEL_LIMIT)
    ticks = sum(speed(c)[0] > 0 for c in loop.commands)
    assert ticks * 0.001 == pytest.approx(0.2, abs=0.015)
    loop.controller.reset()
    loop.tick(4)
    assert loop.controller.engage(True).ok and loop.tick(100).state is State.SERVOING


def test_the_leash_runs_through_holds():
    loop = Loop(watchdog__travel=0.2, watchdog__stalled_window=600.0).engaged(120)
    loop.tick(30, feed=False)
    assert loop.tick(150).reason is Reason.TRAVEL_LIMIT


def test_the_leash_measures_turns_too():
    loop = Loop(Asking((0, 0, 0, 0, 0, 0.9)), watchdog__turn=1.0,
                watchdog__stalled_window=600.0).engaged(240)
    assert loop.commands[-1].reason is Reason.TRAVEL_LIMIT


# Clocks, settings -------------------------------------------------------------------------------

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
