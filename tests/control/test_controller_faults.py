# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults: zero at once, latched until reset and engage."""

from __future__ import annotations

import numpy as np
import pytest

from servo_nodes.camera import Camera
from servo_nodes.control.surroundings import Surroundings
from servo_nodes.values import Reason, State
from tests.control.views import CAMERA, MS, OTHER_CAMERA, TICK, Asking, Loop, speed, view


def refused(loop):
    answer = loop.controller.engage(True)
    assert not answer.ok and loop.controller.state is State.STANDBY
    return answer.text

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
    assert not answer.ok and 'halt: expected false, got true; release' in answer.text
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


def test_the_same_camera_again_and_a_camera_before_the_first_are_no_change():
    loop = Loop().engaged()
    loop.controller.calibrate(CAMERA)
    assert loop.tick().state is State.SERVOING
    around = Surroundings()
    assert around.calibrate(CAMERA, engaged=True)
    assert around.camera_changed.startswith('camera_info: expected to stay no camera, got 640x480')
    assert not around.calibrate(CAMERA, engaged=True)


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
