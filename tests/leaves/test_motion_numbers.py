# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Rigid motions: the examples of a textbook, and numbers from outside.

Lynch & Park, *Modern Robotics*, 2017: examples recalled from memory, recomputed; printed to about
three digits. The book orders a twist (w, v).
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation

from servo_nodes import motion

COMPONENTS = st.floats(-3, 3, allow_nan=False)
VECTORS = st.tuples(COMPONENTS, COMPONENTS, COMPONENTS).map(np.array)


def swapped(twist):
    """Return (w, v) of (v, w), and back."""
    return np.concatenate([twist[3:], twist[:3]])


def rows(*numbers):
    """Return the pose with these three rows."""
    return np.vstack([np.reshape(numbers, (3, 4)), [0, 0, 0, 1]])


class TestPrintedExamples:
    """The book's examples, by their numbers."""

    def test_rotation_about_a_tilted_axis(self):
        """Example 3.12."""
        assert_allclose(motion.rotation_from_vector(np.radians(30) * np.array([0, 0.866, 0.5])),
                        [[0.866, -0.250, 0.433], [0.250, 0.967, 0.058], [-0.433, 0.058, 0.899]],
                        atol=0.005)

    def test_twist_of_a_car_in_two_frames(self):
        """Example 3.23; the book orders (w, v)."""
        T_sb = rows(-1, 0, 0, 4, 0, 1, 0, 0.4, 0, 0, -1, 0)
        assert_allclose(motion.transport(T_sb, swapped(np.array([0, 0, -2, 2.8, 4, 0]))),
                        swapped(np.array([0, 0, 2, -2, -4, 0])), atol=0.005)

    def test_screw_between_two_planar_poses(self):
        """Example 3.26."""
        def planar(angle_deg, x, y):
            return motion.pose_from_parts(
                motion.rotation_from_vector((0, 0, np.radians(angle_deg))), (x, y, 0))
        xi = motion.log(planar(60, 2, 1) @ motion.inverse(planar(30, 1, 2)))
        assert_allclose(xi[5], 0.5236, atol=5e-5)
        assert_allclose(swapped(xi) / xi[5], (0, 0, 1, 3.366025404, -3.366025404, 0), atol=1e-8)

    def test_wrench_of_a_hand_that_holds_an_apple(self):
        """Example 3.28: power does not depend on the frame, so wrenches go by the transpose."""
        T_hand = motion.pose_from_parts(np.eye(3), (-0.1, 0, 0))
        T_apple = motion.pose_from_parts(
            [[1, 0, 0], [0, 0, 1], [0, -1, 0]], (-0.25, 0, 0))
        # Wrenches here are (force, moment), as the twists are (linear, angular).
        hand, apple = np.array([0, -5, 0, 0, 0, 0]), np.array([0, 0, 1, 0, 0, 0])
        at_sensor = motion.adjoint(T_hand).T @ hand + motion.adjoint(T_apple).T @ apple
        assert_allclose(swapped(at_sensor), (0, 0, -0.75, 0, -6, 0), atol=0.005)


@given(VECTORS)
def test_quaternions_are_x_y_z_w_with_w_not_negative(vector):
    """SciPy has the same order; transforms3d has w first."""
    rotation = Rotation.from_rotvec(vector)
    ours = motion.quaternion_from_rotation(rotation.as_matrix())
    assert ours[3] >= 0
    assert_allclose(Rotation.from_quat(ours).as_matrix(), rotation.as_matrix(), atol=1e-9)
    assert_allclose(motion.rotation_from_quaternion(3 * rotation.as_quat()),
                    rotation.as_matrix(), atol=1e-9)


@pytest.mark.parametrize('numbers', [(0, 0, 0, 0), (np.nan, 0, 0, 1), (np.inf, 0, 0, 1),
                                     (0, 0, 1), (0, 0, 0, 0, 1)])
def test_what_is_no_quaternion_is_refused(numbers):
    with pytest.raises(ValueError, match='quaternion: expected finite numbers of unit length, 4'):
        motion.rotation_from_quaternion(numbers)


def test_seven_numbers_make_a_pose_and_others_do_not():
    pose = motion.pose_from_numbers((1, 2, 3, 0, 0, np.sqrt(0.5), np.sqrt(0.5)))
    assert_allclose(pose, rows(0, -1, 0, 1, 1, 0, 0, 2, 0, 0, 1, 3), atol=1e-12)
    for wrong in ((1, 2, 3), (1, 2, 3, 0, 0, 0, np.nan)):
        with pytest.raises(ValueError, match='pose: expected 7 finite numbers x y z qx qy qz qw'):
            motion.pose_from_numbers(wrong)


def test_an_old_transforms3d_is_named_with_its_remedy(monkeypatch):
    """Releases below 0.4.2 raise AttributeError on NumPy 2 (np.maximum_sctype is gone)."""
    def absent(*args, **kwargs):
        raise AttributeError("module 'numpy' has no attribute 'maximum_sctype'")
    monkeypatch.setattr('builtins.__import__', absent)
    try:
        motion.quaternion_from_rotation(np.eye(3))
    except ImportError as error:
        message = str(error)
    finally:
        monkeypatch.undo()
    assert 'transforms3d: expected 0.4.2 or newer (pip install' in message
    assert 'maximum_sctype' in message
