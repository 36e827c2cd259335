# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The laws on single views: published twists, weights, axes, boxes, damping, broadcasting.

Reference numbers were computed with `numpy.linalg.pinv` and `scipy.linalg.lstsq` from the
published formulas (Chaumette & Hutchinson 2006; Corke & Hutchinson 2001; Malis et al. 1999).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import lsq_linear

from servo_nodes import motion
from servo_nodes.control import interaction, law, least_squares, path, pose, worth
from servo_nodes.control.law import LawSettings, twists
from servo_nodes.control.law_settings import DampingSettings
from servo_nodes.offline import battery

BARE = LawSettings(gain=0.5, damping=DampingSettings(below=0.0))
GENERAL = battery.TASKS[3].pose


def view(T_CO, corners=None):
    return pose.image(T_CO, battery.square() if corners is None else corners)


def asked(T_CO, settings, corners=None, **more):
    return twists(*interleaved(view(T_CO, corners), view(battery.home(), corners)), settings,
                  **more)


def interleaved(now, goal):
    return now[0], goal[0], now[1], goal[1]


PUBLISHED = {
    'current': [0.09480664749, 0.03810518544, 0.1025667413, 0.1002325112, -0.1023317054,
                0.243230619],
    'goal': [0.05709134446, -0.01099235739, 0.08746602842, 0.001501957789, -0.07746362929,
             0.1241122033],
    'mean': [0.1072323942, 0.02359209157, 0.09697207185, 0.0713543006, -0.1454935218,
             0.1691517436],
    'blend': [0.07594899598, 0.01355641403, 0.09501638485, 0.05086723451, -0.08989766732,
              0.1836714111],
}


@pytest.mark.parametrize('choice', PUBLISHED)
def test_one_step_has_the_published_twist(choice):
    """IM-I: square of 0.2 m, general pose, gain 0.5."""
    twist = asked(GENERAL, replace(BARE, interaction=choice))
    np.testing.assert_allclose(twist, PUBLISHED[choice], atol=1e-9)


def test_depths_that_are_all_too_large_scale_the_translation_only():
    """IM-J: depth times 1.5 gives 1.5 v and the same w."""
    xy, depths = view(GENERAL)
    goal_xy, goal_depths = view(battery.home())
    twist = twists(xy, goal_xy, 1.5 * depths, goal_depths, replace(BARE, interaction='current'))
    np.testing.assert_allclose(twist, [0.1422099712, 0.05715777816, 0.1538501119, 0.1002325112,
                                       -0.1023317054, 0.243230619], atol=1e-9)


@pytest.mark.parametrize('kind', ['points', 'polar', 'partitioned', 'hybrid', 'pose'])
@pytest.mark.parametrize('choice', PUBLISHED)
def test_many_starts_get_the_twists_each_gets_alone(kind, choice):
    rng = np.random.default_rng(5)
    settings = LawSettings(kind=kind, interaction=choice)
    many = motion.exp(rng.uniform(-0.3, 0.3, (2, 3, 6))) @ battery.home()
    xy, depths = view(many)
    goal_xy, goal_depths = view(battery.home())
    weights = rng.uniform(0.2, 1.0, (2, 3, 4))
    together = twists(xy, goal_xy, depths, goal_depths, settings, weights=weights)
    assert together.shape == (2, 3, 6)
    for k in np.ndindex(2, 3):
        alone = twists(xy[k], goal_xy, depths[k], goal_depths, settings, weights=weights[k])
        np.testing.assert_allclose(together[k], alone, atol=1e-9)


@pytest.mark.parametrize('kind', ['points', 'polar', 'partitioned', 'hybrid', 'pose'])
def test_the_goal_itself_asks_for_rest(kind):
    twist = asked(battery.home(), LawSettings(kind=kind))
    np.testing.assert_allclose(twist, np.zeros(6), atol=1e-12)


def test_a_point_without_weight_has_no_say():
    """WT (Comport, Marchand & Chaumette 2006): one point in six is 40 px off; f = 500 px."""
    corners = np.vstack([battery.square(), [(0.05, 0.02, 0), (-0.03, 0.06, 0)]])
    start = motion.pose_from_parts(motion.rotation_from_vector(np.radians([0, 0, 5])),
                                   (0.02, -0.01, 0.55))
    xy, depths = view(start, corners)
    goal_xy, goal_depths = view(battery.home(), corners)
    clean = [0.01047878509, -0.00643778401, 0.02634889617, 0, 0, 0.04793565851]
    settings = replace(BARE, interaction='current')
    np.testing.assert_allclose(twists(xy, goal_xy, depths, goal_depths, settings), clean,
                               atol=1e-9)
    stack, error = interaction.points(xy, depths), (xy - goal_xy).ravel()
    error[8] += 40 / 500
    np.testing.assert_allclose(
        -0.5 * least_squares.fits(stack, error),
        [0.07378299656, -0.03173811682, 0.01599936662, -0.04484615065, -0.1064607167,
         0.04650292024], atol=1e-9)
    xy[4, 0] += 40 / 500
    np.testing.assert_allclose(
        twists(xy, goal_xy, depths, goal_depths, settings, weights=[1, 1, 1, 1, 0, 1]), clean,
        atol=1e-9)


def test_an_axis_that_the_arm_lacks_gets_nothing_and_the_rest_do_its_work():
    settings = replace(BARE, interaction='current', mask=(1, 1, 1, 0, 0, 1))
    twist = asked(GENERAL, settings)
    xy, depths = view(GENERAL)
    error = (xy - view(battery.home())[0]).ravel()
    stack = interaction.points(xy, depths)[:, [0, 1, 2, 5]]
    expected = -0.5 * np.linalg.lstsq(stack, error, rcond=None)[0]
    np.testing.assert_allclose(twist[[0, 1, 2, 5]], expected, atol=1e-9)
    assert not twist[3:5].any()


def test_a_box_gives_the_best_twist_within_it_which_scaling_does_not():
    settings = replace(BARE, interaction='current', solver='box', box_linear=0.05,
                       box_angular=0.1)
    twist = asked(GENERAL, settings)
    xy, depths = view(GENERAL)
    error = (xy - view(battery.home())[0]).ravel()
    stack = interaction.points(xy, depths)
    limit = np.array([0.05] * 3 + [0.1] * 3)
    reference = lsq_linear(stack, -0.5 * error, (-limit, limit), 'trf', tol=1e-14).x
    np.testing.assert_allclose(twist, reference, atol=1e-6)
    free = np.array(PUBLISHED['current'])
    scaled = free * np.min(limit / np.abs(free))

    def lack(xi):
        return np.linalg.norm(stack @ xi + 0.5 * error)

    assert np.all(np.abs(twist) <= limit + 1e-12)
    assert lack(twist) < lack(scaled) - 1e-3


def test_damping_bounds_the_twist_where_the_view_says_little():
    """Three points and the camera on their cylinder (Michel & Rives 1993): rank 5."""
    angles = np.radians([90, 210, 330])
    corners = np.stack([0.12 * np.cos(angles), 0.12 * np.sin(angles), 0 * angles], axis=-1)
    eye = np.array([0.1201 * np.cos(0.61), 0.1201 * np.sin(0.61), -0.5])
    X = corners - eye
    stack = interaction.points(X[:, :2] / X[:, 2:], X[:, 2])
    error = 0.05 * np.linalg.svd(stack)[0][:, -1]
    bare = least_squares.fits(stack, error)
    damped = least_squares.fits(stack, error, least_squares.Damping(0.05, 0.01))
    assert np.linalg.norm(bare) > 100 * np.linalg.norm(damped)
    many = least_squares.fits(np.stack([stack] * 3), error, least_squares.Damping(0.05, 0.01))
    np.testing.assert_allclose(many, np.stack([damped] * 3), atol=1e-9)


def test_damping_sets_in_without_a_step():
    damping = least_squares.Damping(0.1, 0.02)
    smallest = np.array([0.0, 0.01, 0.0199999, 0.02, 0.5])
    np.testing.assert_allclose(damping.squared(smallest), [0.01, 0.0075, 0, 0, 0], atol=1e-6)


@given(st.integers(0, 10 ** 6), st.integers(1, 12), st.integers(3, 6))
def test_least_squares_are_those_of_numpy_for_any_rank(seed, rows, columns):
    rng = np.random.default_rng(seed)
    stack = rng.normal(size=(3, rows, columns)) * 10 ** rng.uniform(-3, 3)
    if rng.random() < 0.5:
        stack[1, :, 0] = stack[1, :, -1]
    right = rng.normal(size=(3, rows))
    expected = np.array([np.linalg.lstsq(a, b, rcond=1e-9)[0]
                         for a, b in zip(stack, right, strict=True)])
    scale = 1 + np.abs(expected).max()
    np.testing.assert_allclose(least_squares.fits(stack, right) / scale, expected / scale,
                               atol=1e-9)
    for k in range(3):
        fit = least_squares.fit(stack[k], right[k])
        np.testing.assert_allclose(fit.x / scale, expected[k] / scale, atol=1e-9)
        values = np.linalg.svd(stack[k], compute_uv=False)
        np.testing.assert_allclose(fit.values[::-1][:len(values)], values,
                                   atol=1e-7 * values[0])


def test_what_is_not_finite_stays_visible_and_spoils_no_neighbour():
    many = np.stack([GENERAL] * 3)
    xy, depths = view(many)
    xy[1, 0, 0] = np.nan
    goal_xy, goal_depths = view(battery.home())
    for kind in ('points', 'polar', 'partitioned', 'hybrid', 'pose'):
        found = twists(xy, goal_xy, depths, goal_depths, replace(BARE, kind=kind))
        assert not np.isfinite(found[1]).any()
        assert np.isfinite(found[[0, 2]]).all()


def test_the_partitioned_law_reads_advance_and_roll_from_the_pattern():
    """PART: square, roll 50 degrees, Z = 0.8, goal 0.5: vz = ln 1.6, wz = alpha - alpha*."""
    turned = motion.rotation_from_vector(np.radians([0, 0, 50]))
    start = motion.pose_from_parts(turned, (0, 0, 0.8))
    twist = asked(start, LawSettings(kind='partitioned'), gain=1.0)
    np.testing.assert_allclose(twist, [0, 0, 0.4700036292, 0, 0, 0.872664626], atol=1e-9)


def test_the_pose_law_has_the_published_twist():
    """PBL: v = -gain R^T t, w = -gain theta u."""
    T_GC = motion.pose_from_parts(motion.rotation_from_vector(np.radians([15, -25, 40])),
                                  (0.1, -0.05, -0.3))
    expected = [0.05042054139, 0.0649829688, 0.1373316525, -0.1308996939, 0.2181661565,
                -0.3490658504]
    np.testing.assert_allclose(0.5 * pose.twists(T_GC), expected, atol=1e-9)
    start = motion.inverse(T_GC) @ battery.home()
    np.testing.assert_allclose(asked(start, replace(BARE, kind='pose')), expected, atol=1e-9)


@pytest.mark.parametrize('kind', ['hybrid', 'pose'])
def test_pose_and_hybrid_shrink_by_one_e_in_one_time_constant(kind):
    """Their features decay exponentially; HYB with the middle of the pattern on the axis."""
    start = motion.exp(-np.array([0.1, -0.05, -0.2, 0.2, -0.3, 0.5])) @ battery.home()
    step, now = 1 / 800, start
    for _ in range(400):
        now = motion.exp(-step * asked(now, LawSettings(kind=kind), gain=2.0)) @ now

    def feature(T_CO):
        if kind == 'pose':
            T_GC = battery.home() @ motion.inverse(T_CO)
            return np.append(T_GC[:3, 3], motion.vector_from_rotation(T_GC[:3, :3]))
        middle = T_CO[:3, 3]
        return np.array([*middle[:2] / middle[2], np.log(middle[2] / 0.5)])

    np.testing.assert_allclose(feature(now), np.exp(-1) * feature(start), rtol=5e-3, atol=1e-4)


def test_the_planned_path_is_the_published_one_half_way():
    """GEO: straight line and constant axis, half way (Mezouar & Chaumette 2002)."""
    T_GC = motion.pose_from_parts(motion.rotation_from_vector(np.radians([15, -25, 40])),
                                  (0.1, -0.05, -0.3))
    points_G = pose.structure(*view(battery.home()))
    xy, _ = path.planned(T_GC).points(0.5, points_G)
    np.testing.assert_allclose(xy.ravel(), [
        -0.01454907206, 0.06132132288, 0.2745640868, -0.04649315572, 0.3978354829, 0.2618494546,
        0.08649304881, 0.3569366269], atol=1e-9)


@given(st.tuples(*[st.floats(-0.8, 0.8)] * 6).map(np.array), st.floats(0.05, 0.95))
def test_the_path_moves_with_the_twist_it_claims(xi, left):
    way = path.planned(motion.exp(xi))
    h = 1e-6
    numeric = motion.log(motion.inverse(way.poses(left)) @ way.poses(left - h)) / h
    np.testing.assert_allclose(way.twists(left, 1.0), numeric, atol=1e-5)


def test_the_worth_of_the_square_is_the_published_scatter():
    """PN: sigma = 0.5 px, f = 500, square at 0.5 m; in the loop times g / (2 - g)."""
    xy, depths = view(battery.home())
    one = worth.worth(xy, depths, focal_px=500, noise_px=0.5)
    np.testing.assert_allclose(one.scatter_mm, [6.504805916, 6.504805916, 0.8838834765], rtol=1e-8)
    np.testing.assert_allclose(np.radians(one.scatter_deg), [0.0125, 0.0125, 0.001767766953],
                               rtol=1e-8)
    assert one.condition == pytest.approx(63.52425798, rel=1e-9)
    loop = worth.worth(xy, depths, focal_px=500, noise_px=0.5, share_per_image=0.02)
    np.testing.assert_allclose(loop.scatter_mm, [0.6537575926, 0.6537575926, 0.088833632],
                               rtol=1e-8)
    two = worth.worth(xy[:2], depths[:2], focal_px=500)
    assert two.smallest == 0 and np.isinf(two.condition) and np.isinf(two.scatter_mm).all()


@pytest.mark.parametrize('change, words', [
    ({'kind': 'photo'}, 'kind: expected one of'),
    ({'mask': (1, 1, 1, 0.5, 1, 1)}, 'mask: expected six numbers 0 or 1'),
    ({'mask': (0,) * 6}, 'at least one 1'),
    ({'kind': 'pose', 'mask': (1, 1, 1, 0, 0, 1)}, 'expected free and six ones'),
    ({'kind': 'hybrid', 'solver': 'box'}, 'only points and polar'),
    ({'gain': float('nan')}, 'gain: expected a finite number'),
])
def test_settings_refuse_what_no_law_can_do(change, words):
    with pytest.raises(ValueError, match=words):
        LawSettings(**change)


def test_the_default_law_is_among_those_offered():
    assert law.LawSettings().kind == 'points'
