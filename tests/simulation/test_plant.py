# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The arm: exact motion, and everything an arm does to a command."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy.linalg import expm

from servo_nodes import motion
from servo_nodes.simulation.plant import Plant
from servo_nodes.simulation.settings import PlantSettings

MS = 1_000_000
AHEAD = (0.1, 0.0, 0.0, 0.0, 0.0, 0.5)


def plant(T_WC=None, **values) -> Plant:
    """Return an arm that holds its last command unless told otherwise."""
    settings = dataclasses.replace(PlantSettings(silence='hold'), **values)
    return Plant(settings, np.eye(4) if T_WC is None else T_WC, 0)


def matrix_of(xi):
    """Return the 4x4 matrix of a twist (v, w), for SciPy's exponential."""
    matrix = np.zeros((4, 4))
    matrix[:3, :3], matrix[:3, 3] = np.cross(np.eye(3), xi[3:]), xi[:3]
    return matrix


@pytest.mark.parametrize('steps', [1, 7, 50, 2000])
def test_a_constant_twist_is_integrated_exactly_in_any_number_of_steps(steps):
    # CHECKS SE-I: 2 s along a circle of radius 0.2 m; verified there with SciPy's expm.
    arm = plant()
    arm.apply(AHEAD, 0)
    for k in range(1, steps + 1):
        arm.advance_to(round(2e9 * k / steps))
    expected = [[0.5403023059, -0.8414709848, 0, 0.168294197],
                [0.8414709848, 0.5403023059, 0, 0.09193953883], [0, 0, 1, 0]]
    np.testing.assert_allclose(arm.state()[0][:3], expected, atol=1e-9)


def test_a_command_repeated_in_every_period_moves_the_same_way_as_one():
    arm = plant()
    for k in range(100):
        arm.apply(AHEAD, 20 * k * MS)
        arm.advance_to(20 * (k + 1) * MS)
    np.testing.assert_allclose(arm.state()[0], expm(matrix_of(np.array(AHEAD)) * 2.0), atol=1e-12)


def test_a_fixed_point_moves_in_the_camera_as_the_exact_motion_says():
    # CHECKS IM-E (Pinocchio and SciPy): P' = inverse(exp(xi dt)) P for a point fixed in the world.
    arm = plant()
    arm.apply((0.05, -0.03, 0.1, 0.2, -0.1, 0.3), 0)
    arm.advance_to(40 * MS)
    moved = motion.inverse(arm.state()[0]) @ (0.2, -0.1, 1, 1)
    np.testing.assert_allclose(moved[:3], (0.2008326778, -0.09322100761, 0.9959712123), atol=1e-9)
    np.testing.assert_allclose(moved[:2] / moved[2], (0.2016450629, -0.09359809446), atol=1e-9)


def test_a_command_takes_effect_after_its_delay_to_the_nanosecond():
    arm = plant(delay=0.0500000017)
    arm.apply(AHEAD, 10 * MS)
    arm.advance_to(10 * MS + 50_000_001)
    assert not arm.state()[1].any()
    arm.advance_to(10 * MS + 50_000_003)
    np.testing.assert_allclose(arm.state()[1], AHEAD)
    np.testing.assert_allclose(arm.state()[0], expm(matrix_of(np.array(AHEAD)) * 1e-9), atol=1e-15)


def test_commands_keep_their_order_and_a_late_stamp_counts_as_now():
    arm = plant(delay=0.01)
    arm.advance_to(100 * MS)
    arm.apply((0.1, 0, 0, 0, 0, 0), 0)
    arm.apply((0.2, 0, 0, 0, 0, 0), 50 * MS)
    arm.advance_to(109 * MS)
    assert not arm.state()[1].any()
    arm.advance_to(110 * MS)
    assert arm.state()[1][0] == 0.2


def test_the_lag_rises_as_the_closed_form_says():
    # CHECKS LP: tau = 0.1 s, after 5 samples of 0.02 s the step has risen to 1 - 1/e.
    arm = plant(lag=0.1)
    arm.apply((1, 0, 0, 0, 0, 0), 0)
    risen = []
    for k in range(1, 6):
        arm.advance_to(20 * k * MS)
        risen.append(arm.state()[1][0])
    np.testing.assert_allclose(risen[0], 0.1812692469, atol=1e-9)
    np.testing.assert_allclose(risen[-1], 0.6321205588, atol=1e-9)
    # Integral of 1 - exp(-t/tau) over 0.1 s.
    np.testing.assert_allclose(arm.state()[0][0, 3], 0.1 - 0.1 * (1 - np.exp(-1)), atol=1e-12)


def test_the_lagged_motion_on_a_curve_agrees_with_fine_steps_of_scipy():
    arm, xi = plant(lag=0.08), np.array((0.2, -0.1, 0.3, 0.9, -1.2, 0.7))
    arm.apply(xi, 0)
    arm.advance_to(300 * MS)
    pose, h = np.eye(4), 1e-4
    for k in range(3000):
        share = 1 - np.exp(-(k + 0.5) * h / 0.08)
        pose = pose @ expm(matrix_of(xi * share) * h)
    np.testing.assert_allclose(arm.state()[0], pose, atol=2e-8)


def test_the_lagged_pose_does_not_depend_on_how_often_it_is_asked_for():
    one, many = plant(lag=0.05, limited=True), plant(lag=0.05, limited=True)
    for arm, steps in ((one, 1), (many, 333)):
        arm.apply((0.3, 0, 0.1, 0.2, 0, 1.0), 3 * MS)
        for k in range(1, steps + 1):
            arm.advance_to(round(400 * MS * k / steps))
            arm.state()
    np.testing.assert_allclose(one.state()[0], many.state()[0], atol=1e-12)


def test_acceleration_limits_ramp_and_keep_the_direction():
    # CHECKS SLEW: 0.2 m/s to rest at 0.5 m/s^2 takes 0.4 s and v^2 / 2a = 0.04 m.
    arm = plant(limited=True, linear_acceleration=0.5, angular_acceleration=100.0)
    arm.apply((0.12, 0.16, 0, 0, 0, 0), 0)
    arm.advance_to(1000 * MS)
    before = arm.state()[0][:3, 3]
    arm.apply((0, 0, 0, 0, 0, 0), 1000 * MS)
    arm.advance_to(1200 * MS)
    np.testing.assert_allclose(arm.state()[1][:3], (0.06, 0.08, 0), atol=1e-12)
    arm.advance_to(1398 * MS)
    assert np.linalg.norm(arm.state()[1]) > 0
    arm.advance_to(1400 * MS)
    np.testing.assert_allclose(arm.state()[1], 0, atol=1e-12)
    assert np.linalg.norm(arm.state()[0][:3, 3] - before) == pytest.approx(0.04, abs=1e-9)


def test_angular_acceleration_has_its_own_limit():
    arm = plant(limited=True, linear_acceleration=1000.0, angular_acceleration=2.0)
    arm.apply((0.1, 0, 0, 0, 0, 1.0), 0)
    arm.advance_to(100 * MS)
    np.testing.assert_allclose(arm.state()[1], (0.1, 0, 0, 0, 0, 0.2), atol=1e-12)


def test_commands_are_rounded_to_the_steps_of_the_arm():
    arm = plant(linear_step=0.01, angular_step=0.05)
    arm.apply((0.004, 0.016, -0.026, 0.02, 0.08, -0.13), 0)
    arm.advance_to(1)
    np.testing.assert_allclose(arm.state()[1], (0, 0.02, -0.03, 0, 0.1, -0.15), atol=1e-12)


def test_one_kind_of_arm_stops_when_commands_cease_and_the_other_goes_on():
    stopping, going = plant(silence='stop', timeout=0.2), plant(silence='hold', timeout=0.2)
    for arm in (stopping, going):
        arm.apply((0.1, 0, 0, 0, 0, 0), 0)
        arm.advance_to(150 * MS)
        arm.apply((0.1, 0, 0, 0, 0, 0), 150 * MS)
        arm.advance_to(1000 * MS)
    assert stopping.state()[0][0, 3] == pytest.approx(0.035, abs=1e-12)
    assert not stopping.state()[1].any()
    assert going.state()[0][0, 3] == pytest.approx(0.1, abs=1e-12)


def test_a_hand_eye_error_moves_the_true_camera_along_another_line():
    # The arm moves the believed camera B; the true camera C is fixed to it: T_WC = T_WB T_BC.
    turn, shift, xi = (0.0, 0.0, np.pi / 2), (0.0, 0.05, 0.0), np.array((0.1, 0.0, 0, 0, 0, 0.5))
    T_BC = motion.pose_from_parts(motion.rotation_from_vector(turn), shift)
    arm = plant(T_WC=T_BC, hand_eye_rotation=turn, hand_eye_translation=shift)
    arm.apply(xi, 0)
    arm.advance_to(700 * MS)
    np.testing.assert_allclose(arm.state()[0], expm(matrix_of(xi) * 0.7) @ T_BC, atol=1e-12)


def test_new_settings_apply_from_now_on():
    arm = plant()
    arm.apply((0.1, 0, 0, 0, 0, 0), 0)
    arm.advance_to(1000 * MS)
    arm.adopt(PlantSettings(silence='hold', delay=1.0))
    arm.apply((0, 0, 0, 0, 0, 0), 1000 * MS)
    arm.advance_to(1500 * MS)
    assert arm.state()[0][0, 3] == pytest.approx(0.15, abs=1e-12)
    arm.advance_to(3000 * MS)
    assert arm.state()[0][0, 3] == pytest.approx(0.2, abs=1e-12)
