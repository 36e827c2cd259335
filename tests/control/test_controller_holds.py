# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Holds: what stops the camera for a while, how it brakes, and how it starts again."""

from __future__ import annotations

import math

import numpy as np
import pytest

from servo_nodes.values import Reason, State
from tests.control.views import MS, START, TICK, Asking, Loop, speed, view


def refused(loop):
    answer = loop.controller.engage(True)
    assert not answer.ok and loop.controller.state is State.STANDBY
    return answer.text

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


def test_a_loop_that_slept_starts_from_rest_even_when_a_fresh_view_has_come():
    loop = Loop().engaged(40)
    assert speed(loop.commands[-1])[0] > 0.09
    loop.now += 2000 * MS
    loop.controller.observe(view(loop.now), loop.now)
    command = loop.controller.command(loop.now)
    assert (command.state, command.reason) == (State.HOLDING, Reason.OVERRUN)
    assert not command.twist.vector.any()
    assert command.detail.startswith('the loop did not run for 2.0')
    moving = [command.twist.vector.any() for command in (loop.tick() for _ in range(40))]
    assert not any(moving[:3]) and moving[-1]


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
