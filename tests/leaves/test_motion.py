# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Rigid motions against SciPy, Pinocchio, pytransform3d, transforms3d.

The numbers named SE-* were computed with those libraries, in most cases two independent ways.
"""

from __future__ import annotations

import numpy as np
import pytest
import transforms3d
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from servo_nodes import motion

pin = pytest.importorskip('pinocchio')
transformations = pytest.importorskip('pytransform3d.transformations')

COMPONENTS = st.floats(-3, 3, allow_nan=False)
VECTORS = st.tuples(COMPONENTS, COMPONENTS, COMPONENTS).map(np.array)
TWISTS = st.tuples(*[COMPONENTS] * 6).map(np.array)


def generator(xi):
    """Return the 4x4 matrix whose exponential is exp(xi)."""
    matrix = np.zeros((4, 4))
    matrix[:3, :3] = motion.skew(xi[3:])
    matrix[:3, 3] = xi[:3]
    return matrix


def swapped(twist):
    """Return (w, v) of (v, w), and back."""
    return np.concatenate([twist[3:], twist[:3]])


def rows(*numbers):
    """Return the pose with these three rows."""
    return np.vstack([np.reshape(numbers, (3, 4)), [0, 0, 0, 1]])


SE_A = (np.array([0.1, -0.2, 0.3, 0.4, -0.5, 0.6]),
        rows(0.7140753634, -0.6196565105, -0.325764001, 0.09411681849,
             0.4321649455, 0.7562609655, -0.4912258257, -0.2290859331,
             0.550753879, 0.2099884783, 0.8078211459, 0.2796838434))
SE_B = (np.array([0.5, 0.2, -0.1, 1e-8, -2e-8, 3e-8]),
        rows(1, -3.00000001e-08, -1.999999985e-08, 0.499999998,
             2.99999999e-08, 1, -1.00000003e-08, 0.200000008,
             2.000000015e-08, 9.9999997e-09, 1, -0.099999994))
SE_C = (np.array([0.3, 0, -0.4, 1.8, -1.2, 2.2]),
        rows(-0.3182883645, -0.4934342584, 0.8094536118, 0.04310025118,
             -0.4134137885, -0.6961417174, -0.5869205643, 0.3317652932,
             0.8531011408, -0.5214492708, 0.01758128252, -0.008846409199))


@pytest.mark.parametrize(('xi', 'pose'), [SE_A, SE_B, SE_C], ids=['SE-A', 'SE-B', 'SE-C'])
def test_exponential_has_the_known_values_and_its_logarithm_returns(xi, pose):
    assert_allclose(motion.exp(xi), pose, atol=1e-9)
    assert_allclose(motion.log(motion.exp(xi)), xi, atol=1e-9)


@given(TWISTS)
def test_exponential_agrees_with_three_libraries(xi):
    ours = motion.exp(xi)
    assert_allclose(ours, expm(generator(xi)), atol=1e-9)
    assert_allclose(ours, pin.exp6(pin.Motion(xi[:3], xi[3:])).homogeneous, atol=1e-9)
    theirs = transformations.transform_from_exponential_coordinates(swapped(xi))
    assert_allclose(ours, theirs, atol=1e-9)


@given(VECTORS, VECTORS)
def test_exponential_of_the_logarithm_is_the_pose(vector, translation):
    pose = motion.pose_from_parts(Rotation.from_rotvec(vector).as_matrix(), translation)
    xi = motion.log(pose)
    assert np.linalg.norm(xi[3:]) <= np.pi + 1e-12
    assert_allclose(motion.exp(xi), pose, atol=1e-9)


@pytest.mark.parametrize('angle', [0.0, 1e-12, 1e-8, 1e-5, motion.SMALL_ANGLE * (1 - 1e-6),
                                   motion.SMALL_ANGLE * (1 + 1e-6), 0.1, 3.0])
def test_series_and_closed_form_agree_with_the_matrix_exponential(angle):
    """Both sides of the branch at `SMALL_ANGLE`, and its far ends."""
    axis = np.array([1, -2, 2]) / 3
    xi = np.concatenate([[0.3, -0.2, 0.5], angle * axis])
    assert_allclose(motion.exp(xi), expm(generator(xi)), rtol=0, atol=1e-13)
    assert_allclose(motion.log(motion.exp(xi)), xi, rtol=0, atol=1e-13)


@pytest.mark.parametrize('function', [motion.left_jacobian, motion.left_jacobian_inverse])
def test_jacobians_do_not_step_at_the_branch(function):
    axis = np.array([1, -2, 2]) / 3
    below = function(motion.SMALL_ANGLE * (1 - 1e-12) * axis)
    above = function(motion.SMALL_ANGLE * (1 + 1e-12) * axis)
    assert_allclose(below, above, rtol=0, atol=1e-12)


def test_left_jacobian_has_the_known_values():
    """SE-J (series, Pinocchio, finite differences)."""
    w = (0.2, -0.3, 0.1)
    assert_allclose(motion.left_jacobian(w),
                    [[0.9834496119, -0.05934961497, -0.1449480687],
                     [0.03948914921, 0.9917248059, -0.1038038806],
                     [0.1515682239, 0.09387364775, 0.9784844954]], atol=1e-9)
    assert_allclose(motion.left_jacobian_inverse(w),
                    [[0.9916471572, 0.04498829431, 0.1516705686],
                     [-0.05501170569, 0.9958235786, 0.09749414715],
                     [-0.1483294314, -0.1025058528, 0.9891413043]], atol=1e-9)


@given(VECTORS)
def test_left_jacobian_is_pinocchios_right_jacobian_transposed(w):
    assert_allclose(motion.left_jacobian(w), pin.Jexp3(w).T, atol=1e-9)
    assert_allclose(motion.left_jacobian_inverse(w) @ motion.left_jacobian(w), np.eye(3),
                    atol=1e-8)


@pytest.mark.parametrize('short_of_pi', [1e-1, 1e-3, 1e-6, 1e-9, 1e-12])
def test_logarithm_near_half_a_turn_keeps_its_digits(short_of_pi):
    """SE-E, and nearer (SciPy's rotation vector)."""
    vector = np.array([1, 2, 2]) / 3 * (np.pi - short_of_pi)
    rotation = Rotation.from_rotvec(vector).as_matrix()
    assert_allclose(motion.vector_from_rotation(rotation), vector, atol=1e-7)


def test_known_rotation_near_half_a_turn():
    """SE-E: axis (1, 2, 2)/3, pi - 1e-6."""
    rotation = [[-0.7777777778, 0.4444437778, 0.4444451111],
                [0.4444451111, -0.1111111111, 0.8888885556],
                [0.4444437778, 0.8888892222, -0.1111111111]]
    vector = (1.047197218, 2.094394436, 2.094394436)
    assert_allclose(motion.rotation_from_vector(vector), rotation, atol=1e-9)
    assert_allclose(motion.vector_from_rotation(rotation), vector, atol=1e-7)
    assert_allclose(motion.quaternion_from_rotation(rotation),
                    (0.3333333333, 0.6666666667, 0.6666666667, 5.000000004e-07), atol=1e-7)


@pytest.mark.parametrize('axis', [(1, -1, 0.5), (1, 0, 0), (0, 1, 0), (0, 0, -1), (0, -1, 1)])
def test_logarithm_at_exactly_half_a_turn_is_right_up_to_its_sign(axis):
    """SE-F is the first row."""
    axis = np.array(axis) / np.linalg.norm(axis)
    rotation = 2 * np.outer(axis, axis) - np.eye(3)
    vector = motion.vector_from_rotation(rotation)
    assert_allclose(np.abs(vector @ axis), np.pi, atol=1e-9)
    assert_allclose(motion.rotation_from_vector(vector), rotation, atol=1e-9)


def test_every_branch_of_the_quaternion_is_taken_at_once():
    """Broadcast rotations by nearly half a turn about each axis, and none."""
    vectors = np.array([[3.1, 0.01, 0], [0, 3.1, 0.01], [0.01, 0, 3.1], [0, 0, 0], [1, 1, 1]])
    rotations = Rotation.from_rotvec(vectors).as_matrix()
    assert_allclose(motion.vector_from_rotation(rotations), vectors, atol=1e-12)


def test_lever_arm_moves_the_tool():
    """SE-G (Pinocchio, pytransform3d): v_tool = v + p x w."""
    T_tool_camera = motion.pose_from_parts(np.eye(3), (0, 0, 0.1))
    assert_allclose(motion.transport(T_tool_camera, (0, 0, 0, 0.5, 0, 0)),
                    (0, 0.05, 0, 0.5, 0, 0), atol=1e-12)


EUROC_T_BS = rows(0.0148655429818, -0.999880929698, 0.00414029679422, -0.0216401454975,
                  0.999557249008, 0.0149672133247, 0.025715529948, -0.064676986768,
                  -0.0257744366974, 0.00375618835797, 0.999660727178, 0.00981073058949)


def test_adjoint_of_a_real_rig():
    """SE-H: extrinsics of EuRoC's cam0, rotation made orthonormal again."""
    u, _, vt = np.linalg.svd(EUROC_T_BS[:3, :3])
    T_BS = motion.pose_from_parts(u @ vt, EUROC_T_BS[:3, 3])
    xi = np.array([0.1, -0.05, 0.2, 0.3, 0.1, -0.2])
    expected = (0.06280933648, 0.09891938163, 0.184524584,
                -0.09635648943, 0.29622079, -0.2072888576)
    assert_allclose(motion.transport(T_BS, xi), expected, atol=1e-9)
    assert_allclose(generator(motion.transport(T_BS, xi)),
                    T_BS @ generator(xi) @ motion.inverse(T_BS), atol=1e-12)


@given(TWISTS, TWISTS)
def test_adjoint_agrees_with_pinocchio_and_pytransform3d(pose_xi, twist):
    T_AB = motion.exp(pose_xi)
    theirs = pin.SE3(T_AB[:3, :3], T_AB[:3, 3]).act(pin.Motion(twist[:3], twist[3:])).vector
    assert_allclose(motion.transport(T_AB, twist), theirs, atol=1e-9)
    other = transformations.adjoint_from_transform(T_AB) @ swapped(twist)
    assert_allclose(motion.transport(T_AB, twist), swapped(other), atol=1e-9)


@pytest.mark.parametrize('steps', [1, 7, 50, 400])
def test_exact_steps_stay_on_the_circle(steps):
    """SE-I (SciPy): radius 0.2 m, for any number of steps."""
    pose = np.eye(4)
    for _ in range(steps):
        pose = pose @ motion.exp(np.array([0.1, 0, 0, 0, 0, 0.5]) * 2 / steps)
    assert_allclose(pose, rows(0.5403023059, -0.8414709848, 0, 0.168294197,
                               0.8414709848, 0.5403023059, 0, 0.09193953883,
                               0, 0, 1, 0), atol=1e-9)


def test_body_axes_become_optical_axes():
    """SE-L (SciPy, transforms3d): x forward, y left, z up to x right, y down, z forward."""
    rotation = motion.rotation_from_quaternion((-0.5, 0.5, -0.5, 0.5))
    T_optical_body = motion.pose_from_parts(rotation.T, np.zeros(3))
    assert_allclose(motion.transport(T_optical_body, (0.3, 0.1, -0.2, 0.05, -0.4, 0.6)),
                    (-0.1, 0.2, 0.3, 0.4, -0.6, 0.05), atol=1e-12)
    assert_allclose(transforms3d.euler.euler2mat(-np.pi / 2, 0, -np.pi / 2, 'sxyz'), rotation,
                    atol=1e-12)


@given(TWISTS, TWISTS)
def test_inverse_undoes_a_motion(xi, other):
    pose = motion.exp(xi)
    assert_allclose(pose @ motion.inverse(pose), np.eye(4), atol=1e-12)
    assert_allclose(motion.adjoint(motion.inverse(pose)) @ motion.transport(pose, other), other,
                    atol=1e-9)


def test_everything_broadcasts_over_leading_axes():
    rng = np.random.default_rng(7)
    xi = rng.normal(size=(3, 5, 6))
    poses = motion.exp(xi)
    assert poses.shape == (3, 5, 4, 4)
    for index in np.ndindex(3, 5):
        single = motion.exp(xi[index])
        assert_allclose(poses[index], single, atol=1e-15)
        assert_allclose(motion.log(poses)[index], motion.log(single), atol=1e-12)
        assert_allclose(motion.inverse(poses)[index], motion.inverse(single), atol=1e-15)
        assert_allclose(motion.transport(poses, xi)[index], motion.transport(single, xi[index]),
                        atol=1e-12)
    assert motion.angle_between(poses[..., :3, :3], np.eye(3)).shape == (3, 5)


@given(VECTORS, VECTORS)
def test_angle_between_is_the_size_of_the_relative_rotation(a, b):
    first, second = Rotation.from_rotvec(a), Rotation.from_rotvec(b)
    assert_allclose(motion.angle_between(first.as_matrix(), second.as_matrix()),
                    (first.inv() * second).magnitude(), atol=1e-7)
