# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The whole controller in a closed loop round an ideal camera: it comes home, and says so in time.

The plant is exact: a twist that is held for a tick is one screw motion.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from servo_nodes import motion
from servo_nodes.control.controller import Controller
from servo_nodes.values import SECOND_NS, State, View
from tests.control.views import CAMERA, MS, START, TICK, pose, settings, speed

HOME = pose((0.0, 0.0, -0.42))
NEAR_MM, NEAR_DEG = 0.4, 0.06
ARM = (0.05, -0.02, 0.15, 0.0, 0.0, math.sin(0.3), math.cos(0.3))


class Plant:
    """A camera over a plate of points, moved by what the controller sends."""

    def __init__(self, offset, *, points=100, noise_px=0.07, latency=40 * MS, lag_ticks=2,
                 period=3, seed=3, depths=True, **values):
        self.rng = np.random.default_rng(seed)
        self.points_W = np.c_[self.rng.uniform(-0.14, 0.14, points),
                              self.rng.uniform(-0.10, 0.10, points), np.zeros(points)]
        self.depths = depths
        self.noise, self.latency, self.period = noise_px / CAMERA.fx, latency, period
        self.pose = HOME @ offset
        self.now, self.count = START, 0
        self.pipeline = [np.zeros(6)] * lag_ticks
        self.on_the_way = []
        self.controller = Controller(settings(**values))
        self.controller.calibrate(CAMERA)
        self.arm = None
        if 'output__from_camera' in values:
            self.arm = np.linalg.inv(motion.adjoint(motion.pose_from_numbers(
                np.array(values['output__from_camera']))))
        self.commands = []

    def view(self):
        camera = np.linalg.inv(self.pose)
        seen = self.points_W @ camera[:3, :3].T + camera[:3, 3]
        goal = self.points_W + (0, 0, 0.42)
        noise = self.noise * self.rng.normal(size=(len(seen), 2))
        return View(self.now, CAMERA.frame_id, seen[:, :2] / seen[:, 2:] + noise,
                    goal[:, :2] / goal[:, 2:],
                    seen[:, 2] if self.depths else np.full(len(seen), np.nan), goal[:, 2],
                    np.ones(len(seen)), np.arange(len(seen)))

    def run(self, seconds, *, blind=False):
        for _ in range(round(seconds * 100)):
            if self.count % self.period == 0 and not blind:
                self.on_the_way.append((self.now + self.latency, self.view()))
            while self.on_the_way and self.on_the_way[0][0] <= self.now:
                self.controller.observe(self.on_the_way.pop(0)[1], self.now)
            command = self.controller.command(self.now)
            self.commands.append((command, *self.error()))
            vector = command.twist.vector
            self.pipeline.append(vector if self.arm is None else self.arm @ vector)
            self.pose = self.pose @ motion.exp(self.pipeline.pop(0) * 0.01)
            self.now += TICK
            self.count += 1
        return command

    def engage(self):
        self.run(0.1)
        answer = self.controller.engage(True)
        assert answer.ok, answer.text
        self.engaged = self.now
        return self

    def error(self):
        """Return how far the camera is from home, mm and degrees."""
        away = np.linalg.inv(HOME) @ self.pose
        angle = math.acos(min(1.0, max(-1.0, (np.trace(away[:3, :3]) - 1) / 2)))
        return 1e3 * float(np.linalg.norm(away[:3, 3])), math.degrees(angle)

    def settled(self):
        """Return seconds from engaging to settled, and the error then."""
        for command, *error in self.commands:
            if command.state is State.SETTLED:
                return (command.decided - self.engaged) / SECOND_NS, error
        raise AssertionError(f'never settled: {self.commands[-1][0]}')


STARTS = {
    'near': pose((0.002, -0.001, 0.003), (0.0, 0.01, 0.02)),
    'sideways': pose((0.10, 0.06, -0.05), (0.0, 0.0, 0.0)),
    'behind': pose((0.02, -0.03, -0.20), (0.05, -0.1, 0.3)),
    'tilted': pose((-0.08, 0.04, -0.06), (0.25, 0.3, -0.4)),
    'rolled': pose((0.03, 0.0, -0.03), (0.0, 0.1, 1.2)),
}


@pytest.mark.parametrize('start', STARTS.values(), ids=STARTS)
def test_it_settles_within_ten_seconds_truly_at_home_and_stays_there(start):
    plant = Plant(start).engage()
    plant.run(10.0)
    seconds, (millimetres, degrees) = plant.settled()
    assert seconds < 10.0
    assert millimetres < NEAR_MM and degrees < NEAR_DEG
    after = [error for command, *error in plant.commands
             if command.decided > plant.engaged + (seconds + 0.01) * SECOND_NS]
    assert max(mm for mm, _ in after) < NEAR_MM and max(deg for _, deg in after) < NEAR_DEG
    assert all(command.state is State.SETTLED for command, *_ in plant.commands[-50:])


def test_home_is_never_said_far_from_home_whatever_noise_and_depths():
    for noise_px, start, depths in ((0.0, 'behind', False), (0.1, 'behind', False),
                                    (0.0, 'tilted', True), (0.1, 'rolled', True)):
        plant = Plant(STARTS[start], noise_px=noise_px, seed=11, depths=depths).engage()
        plant.run(9.0)
        for command, millimetres, degrees in plant.commands:
            if command.state is State.SETTLED:
                assert millimetres < NEAR_MM and degrees < NEAR_DEG


def test_regulation_goes_on_while_settled_so_that_the_error_keeps_shrinking():
    plant = Plant(STARTS['behind'], noise_px=0.0).engage()
    plant.run(10.0)
    _, (at_settled, _) = plant.settled()
    assert plant.error()[0] < 0.1 * at_settled


def test_four_corners_with_noise_settle_as_near_as_they_can_tell():
    plant = Plant(pose((0.03, 0.02, -0.05), (0.0, 0.05, 0.2)), points=4, noise_px=0.1)
    plant.points_W = np.array([(-0.05, -0.05, 0), (0.05, -0.05, 0), (0.05, 0.05, 0),
                               (-0.05, 0.05, 0.0)])
    plant.engage().run(9.0)
    plant.settled()
    assert plant.error()[0] < 5.0


def test_a_nudged_camera_leaves_settled_and_comes_home_again():
    plant = Plant(STARTS['near']).engage()
    assert plant.run(4.0).state is State.SETTLED
    plant.pose = plant.pose @ pose((0.01, 0.0, 0.0))
    assert plant.run(0.3).state is State.SERVOING
    assert plant.run(5.0).state is State.SETTLED
    assert plant.error()[0] < NEAR_MM


def test_a_blind_spell_holds_and_the_way_home_goes_on_from_rest():
    plant = Plant(STARTS['sideways']).engage()
    plant.run(0.8)
    plant.run(0.6, blind=True)
    command = plant.commands[-1][0]
    assert command.state is State.HOLDING and not command.twist.vector.any()
    plant.run(8.0)
    assert plant.commands[-1][0].state is State.SETTLED and plant.error()[0] < NEAR_MM


def test_with_a_tool_the_twist_arrives_in_its_frame_and_leads_home_as_well():
    plant = Plant(STARTS['tilted'], output__frame='tool0', output__from_camera=ARM).engage()
    plant.run(10.0)
    seconds, (millimetres, degrees) = plant.settled()
    assert millimetres < NEAR_MM and degrees < NEAR_DEG
    assert all(command.twist.frame_id == 'tool0' for command, *_ in plant.commands)
    linear = [speed(command)[0] for command, *_ in plant.commands]
    assert max(linear) <= 0.1 * (1 + 1e-9)


def test_an_arm_that_turns_the_wrong_way_faults_before_it_has_gone_far():
    plant = Plant(STARTS['sideways'], output__frame='tool0',
                  output__from_camera=(0, 0, 0, 0, 0, 0, 1)).engage()
    plant.arm = -np.eye(6)
    before = plant.error()[0]
    plant.run(6.0)
    assert plant.commands[-1][0].state is State.FAULTED
    assert plant.error()[0] < before + 250.0


def test_an_arm_that_does_not_move_faults():
    plant = Plant(STARTS['sideways']).engage()
    plant.arm = np.zeros((6, 6))
    plant.run(14.0)
    assert plant.commands[-1][0].state is State.FAULTED
    assert plant.commands[-1][0].reason.value in ('stalled', 'travel_limit')
