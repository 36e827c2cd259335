# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Homography, essential matrix and pose against OpenCV, and the depth observer's closed form.

Reference values come from `cv2.decomposeHomographyMat`, `cv2.decomposeEssentialMat` and
`cv2.solvePnPGeneric`; the formulas are those of Faugeras & Lustman 1988 and Longuet-Higgins 1981.
"""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.control import depth, law, pose, two_views
from servo_nodes.control.law import LawSettings
from servo_nodes.offline import battery

R = motion.rotation_from_vector(np.radians([5, -10, 15]))
T = np.array([0.1, 0.05, -0.2])
N = np.array([0.2, -0.1, 1]) / np.linalg.norm([0.2, -0.1, 1])
D = 1.2
H = R + np.outer(T, N) / D
H = H / np.linalg.svd(H, compute_uv=False)[1]


def on_plane(count=12, seed=0):
    """Return image points and depths of the goal, and points now, of points on the plane."""
    xy = np.random.default_rng(seed).uniform(-0.4, 0.4, (count, 2))
    rays = np.append(xy, np.ones((count, 1)), axis=1)
    X = rays * (D / (rays @ N))[:, None]
    now = X @ R.T + T
    return xy, X[:, 2], now[:, :2] / now[:, 2:], now[:, 2]


def in_relief(count=20, seed=1):
    rng = np.random.default_rng(seed)
    xy, depths = rng.uniform(-0.4, 0.4, (count, 2)), rng.uniform(0.8, 1.6, count)
    now = pose.structure(xy, depths) @ R.T + T
    return xy, depths, now[:, :2] / now[:, 2:], now[:, 2]


def test_the_homography_of_points_is_that_of_the_motion():
    """HOM: H / H33 and its singular values."""
    goal_xy, _, xy, _ = on_plane()
    found = two_views.homography(xy, goal_xy)
    np.testing.assert_allclose(found, H, atol=1e-8)
    np.testing.assert_allclose(found / found[2, 2], [
        [1.181706288, -0.3333650803, -0.09627731379], [0.3149210981, 1.170699019, -0.08272112354],
        [0.1835599015, 0.09694189374, 1]], atol=1e-8)
    np.testing.assert_allclose(np.linalg.svd(found, compute_uv=False),
                               [1.013578501, 1, 0.8226378466], atol=1e-8)


def test_the_motions_in_a_homography_are_opencvs():
    """HOM: four motions, two of them with the plane ahead; order is free."""
    rotations, shifts, normals = two_views.motions_from_homography(H)
    count, cv_r, cv_t, cv_n = cv2.decomposeHomographyMat(H, np.eye(3))
    theirs = [np.concatenate([np.ravel(x) for x in part])
              for part in zip(cv_r, cv_t, cv_n, strict=True)]
    ours = [np.concatenate([np.ravel(x) for x in part])
            for part in zip(rotations, shifts, normals, strict=True)]
    assert count == len(ours) == 4
    for one in theirs:
        assert min(np.abs(one - other).max() for other in ours) < 1e-8
    ahead = normals[:, 2] > 0
    assert ahead.sum() == 2
    false = np.argmin(np.abs(normals[:, 2] - 0.9331836522))
    np.testing.assert_allclose(
        np.degrees(motion.vector_from_rotation(rotations[false])),
        (4.830021419, -4.15667184, 15.72603945), atol=1e-7)
    np.testing.assert_allclose(shifts[false], (-0.02014, 0.0270589, -0.1879376), atol=1e-5)


def test_the_essential_matrix_and_its_motions_are_opencvs():
    """ESS: scaled to norm sqrt 2, sign free; singular values 1, 1, 0."""
    goal_xy, _, xy, _ = in_relief()
    found = two_views.essential(xy, goal_xy)
    expected = np.array([[0.2577734875, 0.853694507, 0.1195086918],
                         [-0.9098140642, 0.2035363095, -0.2884307397],
                         [-0.09856677232, 0.4777313309, -0.01235333903]])
    np.testing.assert_allclose(found * np.sign(found[0, 1]), expected, atol=1e-7)
    np.testing.assert_allclose(np.linalg.svd(found, compute_uv=False), [1, 1, 0], atol=1e-8)
    rotations, units = two_views.motions_from_essential(expected)
    one, two, unit = cv2.decomposeEssentialMat(expected)
    for other in (one, two):
        assert min(np.abs(other - mine).max() for mine in rotations) < 1e-8
    np.testing.assert_allclose(np.abs(units[0]), np.abs(np.ravel(unit)), atol=1e-8)
    np.testing.assert_allclose(np.abs(units[0]), [0.4364357805, 0.2182178902, 0.8728715609],
                               atol=1e-8)


@pytest.mark.parametrize('source, scene', [
    ('structure', on_plane), ('homography', on_plane), ('structure', in_relief),
    ('essential', in_relief)])
def test_every_source_finds_the_pose(source, scene):
    goal_xy, goal_depths, xy, depths = scene()
    many = np.stack([xy, xy])
    settings = LawSettings(kind='pose', source=source)
    found = law.poses(many, goal_xy, np.stack([depths] * 2), goal_depths, settings)
    expected = motion.inverse(motion.pose_from_parts(R, T))
    np.testing.assert_allclose(found, np.stack([expected] * 2), atol=1e-7)


@pytest.mark.parametrize('source, scene, least', [
    ('structure', on_plane, 3), ('homography', on_plane, 4), ('essential', in_relief, 8)])
def test_too_few_points_for_a_pose_give_nothing(source, scene, least):
    settings = LawSettings(kind='pose', source=source)
    for count in (least - 1, least):
        goal_xy, goal_depths, xy, depths = scene(count)
        found = law.poses(xy, goal_xy, depths, goal_depths, settings)
        assert np.isfinite(found).all() == (count == least)


@pytest.mark.parametrize('degrees', [(0, 0, 30), (10, -5, 0)])
def test_a_pure_rotation_is_found_by_every_source(degrees):
    T_GC = motion.pose_from_parts(motion.rotation_from_vector(np.radians(degrees)), (0, 0, 0))
    goal_xy, goal_depths, _, _ = on_plane()
    X = pose.structure(goal_xy, goal_depths)
    xy, depths = pose.image(motion.inverse(T_GC), X)
    for source in ('structure', 'homography'):
        found = law.poses(xy, goal_xy, depths, goal_depths, LawSettings(source=source))
        np.testing.assert_allclose(found, T_GC, atol=1e-7)


@given(st.tuples(*[st.floats(-0.35, 0.35)] * 6).map(np.array))
def test_the_pose_does_not_inherit_wrong_current_depths(xi):
    T_GC = motion.exp(xi)
    goal_xy, goal_depths, _, _ = in_relief()
    xy, depths = pose.image(motion.inverse(T_GC), pose.structure(goal_xy, goal_depths))
    wrong = depths * np.random.default_rng(4).uniform(0.9, 1.1, len(depths))
    found = pose.relative(xy, goal_xy, wrong, goal_depths)
    np.testing.assert_allclose(found, T_GC, atol=1e-8)


def test_the_pose_of_the_square_is_opencvs():
    """PNP: rotvec (30, 0, 0) degrees at 1 m, f = 500; IPPE lists the second minimum as well."""
    T_CO = motion.pose_from_parts(motion.rotation_from_vector(np.radians([30, 0, 0])), (0, 0, 1))
    xy, depths = pose.image(T_CO, battery.square())
    uv = 500 * xy + [320, 240]
    np.testing.assert_allclose(uv, [[267.3684211, 194.4197156], [372.6315789, 194.4197156],
                                    [367.6190476, 281.2393049], [272.3809524, 281.2393049]],
                               atol=1e-5)
    K = np.array([[500.0, 0, 320], [0, 500, 240], [0, 0, 1]])
    _, vectors, shifts, _ = cv2.solvePnPGeneric(battery.square(), uv, K, None,
                                                flags=cv2.SOLVEPNP_IPPE)
    goal_xy, goal_depths = pose.image(battery.home(), battery.square())
    found = motion.inverse(pose.relative(xy, goal_xy, depths, goal_depths)) @ battery.home()
    np.testing.assert_allclose(motion.vector_from_rotation(found[:3, :3]), np.ravel(vectors[0]),
                               atol=1e-6)
    np.testing.assert_allclose(found[:3, 3], np.ravel(shifts[0]), atol=1e-6)


def test_the_depth_observer_converges_as_published():
    """DOB: vx = 0.1, gain 900, w = 3 1/s: error z0 (1 + w t) exp(-w t) of 1/Z from z0 = 0.8."""
    xy, true = np.array([[0.0, 0.0]]), 2.0
    state = depth.Observed(xy.copy(), np.array([true - 0.8]))
    twist = np.array([0.1, 0, 0, 0, 0, 0])
    for _ in range(50):
        after = xy + [[-0.1 * true * 0.02, 0]]
        state = depth.observed(state, xy, after, twist, duration=0.02, gain=900, nearest=0.05,
                               farthest=20)
        xy = after
    assert true - state.inverse[0] == pytest.approx(0.1593186188, rel=2e-3)


def test_the_depth_observer_learns_nothing_at_rest_or_from_turning():
    xy = np.array([[0.1, -0.05]])
    for twist in (np.zeros(6), np.array([0, 0, 0, 0.1, 0.2, 0.3])):
        after = xy + law.interaction.points(xy, [1.0])[:, 3:] @ twist[3:] * 0.03
        state = depth.observed(depth.Observed(xy + 0.01, np.array([1.2])), xy, after, twist,
                               duration=0.03, gain=900, nearest=0.05, farthest=20)
        assert state.inverse[0] == pytest.approx(1.2, rel=0.01)


def test_the_depth_observer_stays_within_what_is_believed():
    xy = np.array([[0.0, 0.0]])
    state = depth.Observed(xy, np.array([1.0]))
    twist = np.array([0.5, 0, 0, 0, 0, 0])
    for sign in (1, -1):
        found = state
        for _ in range(50):
            found = depth.observed(found, xy, xy + [[sign * 0.3, 0]], twist, duration=0.03,
                                   gain=1e4, nearest=0.2, farthest=4)
            assert 1 / 4 - 1e-12 <= found.inverse[0] <= 1 / 0.2 + 1e-12
