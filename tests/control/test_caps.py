# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Caps: inside for anything, direction kept, the same for ten thousand twists as for one."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.control import caps
from servo_nodes.control.settings import CapsSettings, OutputSettings
from servo_nodes.control.tool import REST, Outlet

SLACK = 1 + 1e-9
ARM = (0.05, -0.02, 0.30, 0.0, 0.0, math.sin(0.3), math.cos(0.3))
NUMBERS = st.floats(allow_nan=True, allow_infinity=True)
TWISTS = st.tuples(*[NUMBERS] * 6)
PLAIN = st.tuples(*[st.floats(-5, 5)] * 6)


def outlet(arm=(), **limits):
    output = OutputSettings(frame='tool0', from_camera=arm) if arm else OutputSettings()
    return Outlet(CapsSettings(**limits), output)


def norms(twist, adjoint=None):
    twist = np.asarray(twist)
    linear = np.linalg.norm(twist[..., :3], axis=-1)
    if adjoint is not None:
        linear = np.maximum(linear, np.linalg.norm((twist @ adjoint.T)[..., :3], axis=-1))
    return linear, np.linalg.norm(twist[..., 3:], axis=-1)


@given(TWISTS, st.sampled_from([(), ARM]))
def test_whatever_is_asked_for_comes_out_finite_and_inside_the_caps(twist, arm):
    door = outlet(arm)
    with np.errstate(all='raise', under='ignore'):
        many = caps.scaled(np.array([twist, REST]), linear=0.1, angular=0.5, tool=door.adjoint)[0]
    for out in (door.capped(twist), many):
        linear, angular = norms(out, door.adjoint)
        assert np.isfinite(out).all()
        assert linear <= 0.1 * SLACK and angular <= 0.5 * SLACK


@given(PLAIN, st.sampled_from([(), ARM]))
def test_one_ratio_keeps_the_direction_and_what_is_inside_the_caps_is_left_alone(twist, arm):
    door = outlet(arm)
    ratio = door.ratio(twist)
    np.testing.assert_allclose(door.capped(twist), ratio * np.array(twist), rtol=1e-12, atol=0)
    linear, angular = norms(twist, door.adjoint)
    assert 0 < ratio <= 1
    assert ratio == pytest.approx(
        min(1.0, 0.1 / max(linear, 1e-300), 0.5 / max(angular, 1e-300)), rel=1e-9)


def test_what_is_not_finite_or_beyond_squaring_rests():
    for bad in (math.nan, math.inf, -math.inf, 1e200):
        twist = (0.01, bad, 0.0, 0.0, 0.0, 0.0)
        out = caps.scaled(twist, linear=0.1, angular=0.5)
        assert not np.any(out)
    assert tuple(outlet().capped((math.nan, 0, 0, 0, 0, 0))) == REST
    assert tuple(outlet().capped((0, 0, 0, 0, math.inf, 0))) == REST


@given(st.lists(st.tuples(PLAIN, PLAIN), min_size=1, max_size=5), st.sampled_from([(), ARM]),
       st.floats(0.001, 0.05))
def test_the_plain_numbers_of_the_loop_and_the_arrays_of_preflight_agree(pairs, arm, duration):
    door = outlet(arm)
    sent = np.array([door.capped(pair[0]) for pair in pairs])
    wanted = caps.scaled([pair[1] for pair in pairs], linear=0.1, angular=0.5, tool=door.adjoint)
    slewed = caps.slewed(sent, wanted, linear_step=0.5 * duration, angular_step=2.5 * duration,
                         tool=door.adjoint)
    braked = caps.braked(sent, linear_step=1.0 * duration, angular_step=5.0 * duration,
                         tool=door.adjoint)
    for k, (_, raw) in enumerate(pairs):
        np.testing.assert_allclose(door.next(sent[k], raw, duration), slewed[k], atol=1e-12)
        np.testing.assert_allclose(door.braked(sent[k], duration), braked[k], atol=1e-12)


@given(PLAIN, PLAIN, st.sampled_from([(), ARM]), st.floats(1e-4, 0.02))
def test_the_next_twist_is_inside_caps_and_accelerations_at_camera_and_tool(a, b, arm, duration):
    door = outlet(arm)
    sent = door.capped(a)
    new = door.next(sent, b, duration)
    linear, angular = norms(new, door.adjoint)
    assert linear <= 0.1 * SLACK and angular <= 0.5 * SLACK
    linear, angular = norms(np.subtract(new, sent), door.adjoint)
    assert linear <= 0.5 * duration * SLACK + 1e-15
    assert angular <= 2.5 * duration * SLACK + 1e-15


def test_a_step_is_taken_whole_when_it_is_small_enough_and_towards_the_goal_when_not():
    door = outlet()
    assert list(door.next(REST, (0.004, 0, 0, 0, 0, 0), 0.01)) == [0.004, 0, 0, 0, 0, 0]
    np.testing.assert_allclose(door.next(REST, (0.06, 0.08, 0, 0, 0, 0), 0.01),
                               (0.003, 0.004, 0, 0, 0, 0), atol=1e-15)


def test_a_lowered_cap_is_kept_at_once_whatever_was_sent_before():
    slow = outlet(linear=0.02)
    assert norms(slow.next((0.1, 0, 0, 0, 0, 0), (0.1, 0, 0, 0, 0, 0), 0.01))[0] <= 0.02 * SLACK
    assert norms(slow.braked((0.1, 0, 0, 0, 0, 0), 0.01))[0] <= 0.02 * SLACK


@given(PLAIN, st.sampled_from([(), ARM]))
def test_braking_is_straight_and_ends_in_exact_rest_within_the_promised_time(twist, arm):
    door = outlet(arm)
    first = sent = door.capped(twist)
    linear, angular = norms(first, door.adjoint)
    promised = max(linear / 1.0, angular / 5.0)
    for ticks in range(1, 40):
        slower = door.braked(sent, 0.01)
        np.testing.assert_allclose(np.outer(slower, first), np.outer(first, slower), atol=1e-12)
        assert norms(np.subtract(slower, sent), door.adjoint)[0] <= 0.01 * SLACK + 1e-12
        sent = slower
        if not any(sent):
            break
    assert not any(sent)
    assert ticks * 0.01 <= promised + 0.01 + 1e-9
    assert promised <= 0.1 * SLACK


def test_no_time_passed_changes_nothing_and_cannot_divide_by_zero():
    door = outlet()
    sent = (0.05, 0, 0, 0, 0, 0.1)
    assert tuple(door.next(sent, (0.1, 0, 0, 0, 0, 0), 0.0)) == sent
    assert tuple(door.braked(sent, 0.0)) == sent
    assert tuple(door.next(sent, (0.1, 0, 0, 0, 0, 0), -1.0)) == sent


def test_a_forbidden_axis_never_moves():
    door = outlet(axes=(1, 1, 0, 0, 0, 1))
    out = door.next(REST, (0.01, 0.01, 9.0, 9.0, 9.0, 0.01), 0.01)
    assert not any(out[2:5]) and all(out[:2]) and out[5]


def test_the_lever_arm_of_a_turn_is_what_the_tool_cap_judges():
    # SE-G of the check values: tool<-camera R = I, p = (0, 0, 0.1), w = 0.5 about x: v = p x w.
    door = outlet((0, 0, 0.1, 0, 0, 0, 1), linear=0.02)
    np.testing.assert_allclose(door.expressed((0, 0, 0, 0.5, 0, 0)), (0, 0.05, 0, 0.5, 0, 0),
                               atol=1e-15)
    assert door.ratio((0, 0, 0, 0.5, 0, 0)) == pytest.approx(0.4)


def test_the_twist_at_a_real_rig_is_that_of_the_check_values():
    # SE-H: EuRoC's camera 0 in the body frame, checked with Pinocchio and pytransform3d.
    r = np.array([[0.0148655429818, -0.999880929698, 0.00414029679422],
                  [0.999557249008, 0.0149672133247, 0.025715529948],
                  [-0.0257744366974, 0.00375618835797, 0.999660727178]])
    u, _, vt = np.linalg.svd(r)
    p = (-0.0216401454975, -0.064676986768, 0.00981073058949)
    arm = (*p, *motion.quaternion_from_rotation(u @ vt))
    out = outlet(tuple(float(x) for x in arm)).expressed((0.1, -0.05, 0.2, 0.3, 0.1, -0.2))
    np.testing.assert_allclose(out, (0.06280933648, 0.09891938163, 0.184524584,
                                     -0.09635648943, 0.29622079, -0.2072888576), atol=1e-8)


def test_the_expressed_twist_is_pinocchio_s_action_on_a_motion():
    pin = pytest.importorskip('pinocchio', reason='Pinocchio is not installed')
    door = outlet(ARM)
    placement = pin.SE3(motion.pose_from_numbers(np.array(ARM)))
    twist = np.array([0.1, -0.2, 0.3, 0.4, -0.5, 0.6])
    np.testing.assert_allclose(door.expressed(twist), placement.act(pin.Motion(twist)).vector,
                               atol=1e-12)


def test_ten_thousand_twists_pass_in_one_call_each_by_its_own_ratio():
    rng = np.random.default_rng(0)
    twists = rng.normal(size=(100, 100, 6))
    out = caps.scaled(twists, linear=np.full((100, 1), 0.1), angular=0.5)
    linear, angular = norms(out)
    assert out.shape == twists.shape
    assert (linear <= 0.1 * SLACK).all() and (angular <= 0.5 * SLACK).all()
    assert (np.isclose(linear, 0.1) | np.isclose(angular, 0.5)).mean() > 0.99
