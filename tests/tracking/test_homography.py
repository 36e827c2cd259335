# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The homography's algebra, against published numbers, OpenCV and exact geometry."""

from __future__ import annotations

import cv2
import numpy as np
import pytest

from servo_nodes import motion
from servo_nodes.tracking import homography

# Row HOM of the check values: R by (5, -10, 15) degrees, t, n and d; H / H33.
ROTATION = motion.rotation_from_vector(np.radians([5.0, -10.0, 15.0]))
SHIFT, NORMAL, DISTANCE = np.array([0.1, 0.05, -0.2]), np.array([0.2, -0.1, 1.0]), 1.2
NORMAL = NORMAL / np.linalg.norm(NORMAL)
MATRIX = ROTATION + np.outer(SHIFT, NORMAL) / DISTANCE
GOLD = np.array([[1.181706288, -0.3333650803, -0.09627731379],
                 [0.3149210981, 1.170699019, -0.08272112354],
                 [0.1835599015, 0.09694189374, 1]])
XY = np.random.default_rng(0).uniform(-0.4, 0.4, (60, 2))


def _there() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the points' coordinates in the other view, and their depths in both."""
    rays = np.concatenate([XY, np.ones((len(XY), 1))], axis=1)
    depths = DISTANCE / (rays @ NORMAL)
    points = (rays * depths[:, None]) @ ROTATION.T + SHIFT
    return points[:, :2] / points[:, 2:], depths, points[:, 2]


def test_the_homography_of_the_check_values_maps_points_as_the_motion_does() -> None:
    assert np.allclose(MATRIX / MATRIX[2, 2], GOLD, atol=1e-8)
    assert np.allclose(homography.mapped(GOLD, XY), _there()[0], atol=1e-9)


@pytest.mark.parametrize('scale', [1.0, -3.7, 0.02])
def test_depths_follow_from_the_homography_alone_whatever_its_scale(scale: float) -> None:
    _, goal_depths, depths = _there()
    normed = homography.normed(scale * MATRIX, XY)
    assert normed is not None
    assert np.allclose(goal_depths * homography.depth_ratios(normed, XY), depths, atol=1e-12)


def test_depths_agree_with_the_decomposition_of_opencv() -> None:
    # cv2.decomposeHomographyMat returns several motions; the true one is among them.
    _, turns, shifts, normals = cv2.decomposeHomographyMat(GOLD, np.eye(3))
    normed = homography.normed(GOLD, XY)
    assert normed is not None
    mine = homography.depth_ratios(normed, XY)
    rays = np.concatenate([XY, np.ones((len(XY), 1))], axis=1)
    theirs = [(rays @ (np.asarray(turn) + np.outer(shift, normal)).T)[:, 2]
              for turn, shift, normal in zip(turns, shifts, normals, strict=True)]
    assert min(np.abs(mine - other).max() for other in theirs) < 1e-8


def test_the_jacobian_of_the_map_is_its_derivative() -> None:
    step = 1e-6
    there, jacobian = homography.mapped_and_jacobian(MATRIX, XY)
    assert np.allclose(there, homography.mapped(MATRIX, XY))
    for axis in range(2):
        ahead, behind = XY.copy(), XY.copy()
        ahead[:, axis] += step
        behind[:, axis] -= step
        slope = (homography.mapped(MATRIX, ahead) - homography.mapped(MATRIX, behind)) / (2 * step)
        assert np.allclose(jacobian[:, :, axis], slope, atol=1e-7)


def test_a_fit_to_exact_points_is_exact_and_agrees_with_opencv() -> None:
    there = _there()[0]
    fit = homography.robust_fit(XY, there, floor=1e-5)
    assert fit is not None
    assert np.allclose(fit.matrix / fit.matrix[2, 2], GOLD, atol=1e-7)
    theirs, _ = cv2.findHomography(XY, there, 0)
    assert np.allclose(fit.matrix, theirs, atol=1e-6)


def test_a_fit_gives_no_weight_to_points_that_are_wrong() -> None:
    rng = np.random.default_rng(1)
    there = _there()[0] + rng.normal(0, 1e-4, XY.shape)
    wrong = np.arange(60) % 4 == 0
    there[wrong] += rng.choice([-1, 1], (wrong.sum(), 2)) * 0.01
    fit = homography.robust_fit(XY, there, MATRIX, floor=1e-5)
    assert fit is not None
    assert (fit.weights[wrong] == 0).all()
    assert np.median(fit.weights[~wrong]) > 0.8
    assert np.abs(fit.matrix / fit.matrix[2, 2] - GOLD).max() < 2e-3


def test_equal_residuals_do_not_starve_the_weights() -> None:
    # The trap of row RW of the check values: more than half the residuals equal makes MAD zero.
    there = _there()[0]
    there[0] += 1e-6
    fit = homography.robust_fit(XY, there, MATRIX, floor=1e-5)
    assert fit is not None
    assert fit.weights.min() > 0.9


@pytest.mark.parametrize('matrix', [
    np.diag([-1.0, 1.0, 1.0]), np.diag([9.0, 9.0, 1.0]), np.diag([0.1, 0.1, 1.0]),
    np.diag([1.0, 0.1, 1.0])], ids=['mirrored', 'too near', 'too far', 'edge-on'])
def test_a_view_no_camera_can_have_is_not_plausible(matrix: np.ndarray) -> None:
    assert not homography.plausible(matrix, XY)
    assert homography.plausible(MATRIX, XY)


def test_a_map_that_puts_points_behind_the_camera_is_no_view() -> None:
    assert homography.normed(np.array([[1.0, 0, 0], [0, 1, 0], [4, 0, 1]]), XY) is None
    assert homography.normed(np.zeros((3, 3)), XY) is None
    assert homography.robust_fit(XY[:3], XY[:3], floor=1e-5) is None
