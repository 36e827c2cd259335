# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Law and gate together: what cannot converge is refused or ends in a fault, with its reason.

The spurious equilibria are LM-A and LM-B (after Chaumette 1998), the rolls R-180
and BAT-roll170 (after Gans, Hutchinson & Corke 2002); the camera moves by the exact exponential.
"""

from __future__ import annotations

import numpy as np
import pytest

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control import pose
from servo_nodes.control.controller import Controller
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.offline import battery
from servo_nodes.settings import settings_from_mapping
from servo_nodes.values import SECOND_NS, Reason, State, View

TICK = SECOND_NS // 100
CAMERA = Camera(1280, 960, 500.0, 500.0, 640.0, 480.0, frame_id='camera')


def rotated(degrees, translation):
    return motion.pose_from_parts(motion.rotation_from_vector(np.radians(degrees)), translation)


def driven(start, goal, seconds, corners=None, **settings):
    """Engage at `start`, until home or faulted; return the last command and the last pose."""
    corners = battery.square() if corners is None else corners
    controller = Controller(settings_from_mapping(
        ControllerSettings, {name.replace('__', '.'): value for name, value in settings.items()}))
    controller.calibrate(CAMERA)
    goal_xy, goal_depths = pose.image(goal, corners)
    now, T, command = SECOND_NS, start, None
    for k in range(round(seconds * 100)):
        now += TICK
        if k % 3 == 0:
            xy, depths = pose.image(T, corners)
            # What no two images are free of; without it the loop takes them for frozen.
            xy = xy + 1e-6 * np.sin(k + np.arange(xy.size)).reshape(xy.shape)
            controller.observe(View(now - TICK, 'camera', xy, goal_xy, depths, goal_depths,
                                    np.ones(len(xy)), np.arange(len(xy))))
        if k == 3:
            answer = controller.engage(True)
            if not answer.ok:
                return answer, T
        command = controller.command(now)
        if command.state in (State.FAULTED, State.SETTLED):
            break
        T = motion.exp(-command.twist.vector * 0.01) @ T
    return command, T


@pytest.mark.parametrize('tilt, distance', [(45, 0.5), (30, 1.0)])
def test_a_spurious_equilibrium_ends_in_the_fault_stalled(tilt, distance):
    """LM-A, LM-B: at rest with 0.1 or 0.019 of error left."""
    command, T = driven(rotated((-tilt, 0, 0), (0, 0, distance)),
                        rotated((tilt, 0, 0), (0, 0, distance)), 40.0, law__interaction='current')
    assert command.state is State.FAULTED and command.reason is Reason.STALLED
    assert not command.twist.vector.any()
    assert np.degrees(motion.vector_from_rotation(T[:3, :3]))[0] < -20


def test_half_a_turn_settles_along_a_planned_path():
    """R-180, from further away and off the axis, with the default law."""
    command, T = driven(rotated((0, 0, 180), (0.02, 0.01, 0.6)), battery.home(), 20.0)
    assert command.state is State.SETTLED
    np.testing.assert_allclose(T, battery.home(), atol=2e-3)


def test_a_roll_of_170_degrees_with_the_goal_matrix_is_refused_when_no_path_may_be_planned():
    """BAT-roll170 with goal: the camera would run into the plane of the target."""
    start = rotated((0, 0, 170), (0, 0, 0.5))
    answer, T = driven(start, battery.home(), 8.0, law__interaction='goal',
                       law__path__mode='direct')
    np.testing.assert_allclose(T, start)
    assert not answer.ok and 'law.path.mode' in answer.text


@pytest.mark.parametrize('task', [battery.TASKS[k] for k in (0, 3)], ids=lambda task: task.name)
@pytest.mark.parametrize('kind', ['points', 'polar', 'hybrid', 'pose'])
def test_every_law_settles_through_the_gate(kind, task):
    command, T = driven(task.pose, battery.home(), 20.0, law__kind=kind)
    assert command.state is State.SETTLED, (command.reason, command.detail)
    np.testing.assert_allclose(T, battery.home(), atol=2e-3)
