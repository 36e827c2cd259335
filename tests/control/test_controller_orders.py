# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Arbitrary orders of events: what the controller promises for all of them.

The machine below is more than ten thousand steps of hypothesis; the walk is another six
thousand of a seeded generator, played twice.
"""

from __future__ import annotations

import math

import numpy as np
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, rule

from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.control.states import ENGAGED, MOVING
from servo_nodes.values import Reason, State
from tests.control import views
from tests.control.views import CAMERA, MS, OTHER_CAMERA, START, Asking, view

ARM = (0.05, 0.0, 0.2, 0.0, 0.0, 0.0, 1.0)
SLACK = 1 + 1e-9
PERIOD = 10 * MS
PROMISE = 0.12 + 0.1 + 0.01
NUMBER = st.floats(allow_nan=True, allow_infinity=True)
REFUSED = st.sampled_from([Reason.NOT_FINITE, Reason.NO_CAMERA, Reason.NO_GOAL,
                           Reason.TOO_FEW_POINTS, Reason.STAMP_ZERO, Reason.CAMERA_MISMATCH])


class Witness:
    """A controller beside what the outside knows about it; every tick is checked."""

    def __init__(self, *, tool=False, heartbeat=False):
        output = {'output__frame': 'tool0', 'output__from_camera': ARM} if tool else {}
        self.known = views.settings(heartbeat__required=heartbeat, **output)
        self.servo = Asking()
        self.controller = Controller(self.known, servo=self.servo)
        self.now = START
        self.camera = None
        self.good = None
        self.image = None
        self.halted = self.halt = False
        self.listeners = self.publishers = 1
        self.sent = np.zeros(6)
        self.log = []

    def observe(self, stamp, received, **changes):
        shift = (0.0, 0.0) if self.servo.error_px < 1 else views.AWAY
        self.controller.observe(view(stamp, shift=shift, **changes), received)
        fine = (self.camera is not None and not changes and stamp != 0
                and 0 <= received - stamp <= 250 * MS and received <= self.now)
        if fine and (self.image is None or stamp > self.image):
            self.good, self.image = received, stamp

    def calibrate(self, camera):
        self.camera = camera
        self.controller.calibrate(camera)

    def halts(self, on):
        self.halt, self.halted = on, self.halted or on
        self.controller.halt(on)

    def graph(self, listeners, publishers):
        self.listeners, self.publishers = listeners, publishers
        self.controller.graph(listeners, publishers)

    def engage(self, on):
        before = self.controller.state
        answer = self.controller.engage(on)
        if self.controller.state not in ENGAGED:
            self.sent = np.zeros(6)
        assert isinstance(answer.text, str) and answer.text
        if before is State.FAULTED:
            assert self.controller.state is State.FAULTED and (not on or not answer.ok)
        elif not on:
            assert self.controller.state is State.STANDBY
        elif answer.ok and before is State.STANDBY:
            assert self.controller.state in ENGAGED
            assert self.listeners >= 1 and self.publishers <= 1 and self.camera is not None

    def reset(self):
        before = self.controller.state
        answer = self.controller.reset()
        assert answer.ok == (before not in ENGAGED and not self.halt)
        if answer.ok:
            self.halted = False
            self.good = self.image = None
            assert self.controller.state is State.STANDBY

    def tick(self, elapsed):
        self.now += elapsed
        before = self.controller.state
        command = self.controller.command(self.now)
        self.log.append((command.state, command.reason, command.detail,
                         command.twist.vector.tobytes(), command.view_stamp))
        self.check(command, before, elapsed)
        self.sent = self.in_camera(command)
        return command

    def in_camera(self, command):
        """Return the twist that went out, in the camera's frame; at rest it may be untold."""
        return self.servo.recorded[-1][1] if command.twist.vector.any() else np.zeros(6)

    def check(self, command, before, elapsed):
        vector, caps = command.twist.vector, self.known.caps
        assert np.isfinite(vector).all()
        camera = self.in_camera(command)
        for twist in (vector, camera):
            assert np.linalg.norm(twist[:3]) <= caps.linear * SLACK
            assert np.linalg.norm(twist[3:]) <= caps.angular * SLACK
        if command.state in (State.STANDBY, State.FAULTED):
            assert not vector.any()
        if command.state in MOVING:
            assert before in ENGAGED
        if before is State.FAULTED:
            assert command.state is State.FAULTED
        if before is State.STANDBY:
            assert command.state in (State.STANDBY, State.FAULTED)
        if self.halted or self.listeners < 1 or self.publishers > 1:
            assert not vector.any()
        if self.halted:
            assert command.state is State.FAULTED
        if vector.any():
            silence = math.inf if self.good is None else (self.now - self.good) / 1e9
            assert silence <= max(PROMISE, 0.12 + elapsed / 1e9 + 0.1)
        if command.state in MOVING and before is State.HOLDING:
            assert not self.sent.any()
        if before is State.STANDBY or elapsed <= 0:
            return
        change = np.linalg.norm((camera - self.sent)[:3])
        if command.state in MOVING:
            duration = min(elapsed / 1e9, 0.02)
            assert change <= caps.linear_acceleration * duration * SLACK + 1e-12
        if command.state is State.HOLDING:
            assert np.linalg.norm(camera) <= np.linalg.norm(self.sent) * SLACK
            assert change <= caps.stop_deceleration * elapsed / 1e9 * SLACK + 1e-12


class Orders(RuleBasedStateMachine):
    """Anything may happen in any order, also all at once between two ticks."""

    @initialize(tool=st.booleans(), heartbeat=st.booleans())
    def start(self, tool, heartbeat):
        self.it = Witness(tool=tool, heartbeat=heartbeat)

    @rule(elapsed=st.sampled_from([PERIOD] * 8 + [0, 1, 2 * PERIOD, 400 * MS]))
    def tick(self, elapsed):
        self.it.tick(elapsed)

    @rule(ticks=st.integers(5, 40), period=st.integers(1, 6))
    def run(self, ticks, period):
        for k in range(ticks):
            if k % period == 0:
                self.it.observe(self.it.now - 15 * MS, self.it.now)
            self.it.controller.heartbeat(self.it.now)
            self.it.tick(PERIOD)

    @rule()
    def prepare_and_engage(self):
        self.it.calibrate(CAMERA)
        self.it.graph(1, 1)
        self.it.controller.heartbeat(self.it.now)
        self.it.tick(PERIOD)
        self.it.observe(self.it.now - 5 * MS, self.it.now)
        self.it.engage(True)

    @rule(age=st.integers(-100, 400), late=st.integers(-5, 5))
    def view(self, age, late):
        self.it.observe(self.it.now - age * MS, self.it.now + late * MS)

    @rule(stamp=st.integers(-2 ** 62, 2 ** 62), received=st.none() | st.integers(0, 2 ** 62))
    def wild_stamp(self, stamp, received):
        self.it.controller.observe(view(stamp), received)
        if self.it.controller.state is State.STANDBY:
            self.it.image = max(self.it.image or 0, stamp)

    @rule(count=st.integers(0, 5))
    def few_points(self, count):
        self.it.observe(self.it.now, self.it.now, count=count)

    @rule(number=NUMBER, where=st.sampled_from(['points_xy', 'goal_xy', 'weights', 'depths']))
    def odd_number(self, number, where):
        shape = (12, 2) if where.endswith('xy') else (12,)
        self.it.observe(self.it.now, self.it.now, **{where: np.full(shape, number)})

    @rule()
    def foreign_frame(self):
        self.it.observe(self.it.now, self.it.now, frame_id='elsewhere')

    @rule(reason=REFUSED)
    def refuse(self, reason):
        self.it.controller.refuse(reason, 'input: expected this, got that')

    @rule(twist=st.tuples(*[NUMBER] * 6) | st.just((0.3, 0, 0, 0, 0, 0.9)),
          error_px=st.sampled_from([0.2, 5.0, 80.0, 400.0, math.nan]))
    def ask(self, twist, error_px):
        self.it.servo.twist, self.it.servo.error_px = twist, error_px

    @rule(on=st.booleans())
    def engage(self, on):
        self.it.engage(on)

    @rule()
    def reset(self):
        self.it.reset()

    @rule(on=st.booleans())
    def halt(self, on):
        self.it.halts(on)

    @rule(listeners=st.integers(0, 2), publishers=st.integers(0, 2))
    def graph(self, listeners, publishers):
        self.it.graph(listeners, publishers)

    @rule(camera=st.sampled_from([CAMERA, CAMERA, OTHER_CAMERA]))
    def calibrate(self, camera):
        self.it.calibrate(camera)

    @rule(late=st.integers(0, 10 ** 10))
    def overrun(self, late):
        self.it.controller.overrun(late)

    @rule(back=st.integers(0, 10 ** 9))
    def jump(self, back):
        self.it.now = max(1, self.it.now - back)
        self.it.controller.jump()
        self.it.good = self.it.image = None
        command = self.it.tick(0)
        assert command.state in (State.STANDBY, State.FAULTED)

    @rule()
    def boom(self):
        self.it.servo.raises = RuntimeError('boom')
        self.it.observe(self.it.now, self.it.now)
        self.it.tick(PERIOD)
        self.it.servo.raises = None


Orders.TestCase.settings = settings(
    max_examples=130, stateful_step_count=80, deadline=None, derandomize=True,
    suppress_health_check=list(HealthCheck))
TestOrders = Orders.TestCase


def walked(seed, steps):
    """Play a random walk over all inputs and return what was decided."""
    rng = np.random.default_rng(seed)
    it = Witness(tool=bool(rng.integers(2)))
    it.calibrate(CAMERA)
    acts = [
        lambda: it.observe(it.now - int(rng.integers(-80, 300)) * MS, it.now),
        lambda: it.observe(it.now, it.now, count=int(rng.integers(0, 6))),
        lambda: it.observe(it.now, it.now, weights=np.full(12, rng.choice([np.nan, 0.5, 2.0]))),
        lambda: it.halts(bool(rng.integers(2))),
        lambda: it.graph(int(rng.integers(2)), int(rng.integers(1, 3))),
        lambda: it.controller.overrun(20 * MS),
        lambda: setattr(it.servo, 'twist', tuple(rng.normal(scale=0.3, size=6))),
        lambda: setattr(it.servo, 'error_px', float(rng.choice([0.3, 30.0, 300.0]))),
        lambda: (setattr(it.servo, 'error_px', 0.3), setattr(it.servo, 'twist', (0.0,) * 6)),
        lambda: it.engage(bool(rng.integers(2))),
        it.reset,
    ]
    healing = [lambda: it.halts(False), lambda: it.graph(1, 1), it.reset, lambda: it.engage(True)]
    for _ in range(steps):
        if rng.random() < 0.02:
            acts[rng.integers(len(acts))]()
        if it.controller.state not in ENGAGED and rng.random() < 0.2:
            healing[rng.integers(len(healing))]()
        if rng.random() < 0.4:
            it.observe(it.now - 12 * MS, it.now)
        it.tick(PERIOD)
    return it.log


def test_the_same_log_twice_gives_the_same_commands_twice_over_six_thousand_ticks():
    first, again = walked(7, 6_000), walked(7, 6_000)
    assert first == again
    states = [entry[0] for entry in first]
    assert set(states) == set(State)
    moving = [entry for entry in first if np.frombuffer(entry[3]).any()]
    assert len(moving) > 500


def test_a_camera_with_any_lens_is_taken():
    it = Witness()
    it.calibrate(Camera(640, 480, 300.0, 300.0, 319.5, 239.5, 'equidistant', (0.01, 0, 0, 0)))
    it.observe(it.now, it.now)
    it.tick(PERIOD)
    it.observe(it.now, it.now)
    it.engage(True)
    assert it.tick(PERIOD).state is State.SERVOING
