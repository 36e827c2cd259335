# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The laws in closed loop with exact motion: published behaviour, closed forms, spurious ends.

Numbers of the battery (after Gans, Hutchinson & Corke 2002) and of the golden runs were made
with two formulations of the rigid motion (closed form and `scipy.linalg.expm`); closed forms are
our own derivations, verified by simulation and SymPy.
"""

from __future__ import annotations

from dataclasses import replace

import cv2
import numpy as np
import pytest
import scipy.integrate
import scipy.linalg
import scipy.optimize
import scipy.spatial

from servo_nodes import motion
from servo_nodes.control import interaction, law, pose
from servo_nodes.control.law import LawSettings
from servo_nodes.control.law_settings import DampingSettings
from servo_nodes.offline import battery

BARE = LawSettings(damping=DampingSettings(below=0.0))
CHOICES = ('current', 'goal', 'mean', 'blend')


def rotated(degrees, translation=(0, 0, 0.5)):
    return motion.pose_from_parts(motion.rotation_from_vector(np.radians(degrees)), translation)


def vector_deg(T):
    return np.degrees(motion.vector_from_rotation(T[..., :3, :3]))


TABLE = {
    'roll': [(297, 0.06186925, 141.4214, 0.2117047, 90),
             (292, 0.05523425, 212.3573, 0.1670203, 90),
             (297, 0.06164703, 141.4214, 0, 90), (315, 0.08811414, 141.4214, 0, 90)],
    'advance': [(245, 0.02156476, 141.3998, 0.5, 0), (330, 0.1207722, 141.3006, 0.5, 0),
                (288, 0.05117862, 141.3702, 0.5, 0), (273, 0.03801841, 141.3833, 0.5, 0)],
    'plane': [(221, 0.01342335, 144.5525, 0.3420201, 40),
              (223, 0.01398072, 153.6538, 0.3420201, 40),
              (181, 0.005848082, 147.1672, 0.3420201, 40),
              (205, 0.009797957, 148.9418, 0.3420201, 40)],
    'general': [(259, 0.02892373, 141.4176, 0.2866082, 26.92582),
                (294, 0.05860975, 151.7865, 0.2866082, 26.92582),
                (280, 0.04402583, 145.0176, 0.2866082, 26.92582),
                (279, 0.0427419, 143.4856, 0.2866082, 26.92582)],
    'far': [(304, 0.07173252, 162.5491, 0.6875886, 106.3015),
            (352, 0.1887856, 279.3214, 0.4458246, 106.3015),
            (325, 0.1094332, 177.5753, 0.4458246, 106.3015),
            (356, 0.205666, 162.5491, 0.5195234, 106.3015)],
    'roll170': [(314, 0.08693486, 141.4214, 5.775969, 170), None,
                (312, 0.08381854, 141.4214, 0, 170), (-1, 1.050723, 141.4214, 0, 170)],
}


@pytest.mark.parametrize('choice', CHOICES)
def test_the_battery_runs_as_published(choice):
    found = battery.run(battery.starts(), replace(BARE, interaction=choice))
    for task, outcome in zip(battery.TASKS, found, strict=True):
        row = TABLE.get(task.name, [None] * 4)[CHOICES.index(choice)]
        if row is not None:
            assert abs(outcome.samples - row[0]) <= 1, task.name
            figures = (outcome.final_px, outcome.feature_px, outcome.camera, outcome.angle_deg)
            np.testing.assert_allclose(figures, row[1:], rtol=1e-4, atol=1e-6, err_msg=task.name)


def test_a_roll_of_170_degrees_with_the_goal_matrix_meets_the_target():
    outcome = battery.run(battery.starts()[5:6], replace(BARE, interaction='goal'))[0]
    assert outcome.failed and outcome.stopped == 'meets the target'


@pytest.mark.parametrize('settings', [
    *[replace(BARE, interaction=choice) for choice in CHOICES],
    *[replace(BARE, kind=kind) for kind in ('polar', 'partitioned', 'hybrid', 'pose')],
], ids=lambda settings: f'{settings.kind} {settings.interaction}')
def test_every_law_comes_home_from_every_task_along_a_planned_path(settings):
    """R-180 among them: no point leaves the start's circle by more than the far task asks for."""
    found = battery.run(battery.starts(), settings, planned=True)
    for task, outcome in zip(battery.TASKS, found, strict=True):
        assert not outcome.failed, task.name
        assert outcome.samples <= 360
        limit = 226 if task.name == 'far' else 160
        assert outcome.feature_px < limit


GOLDEN = {
    'current': ((0.5215483512, -2.064495178, 1.95503572),
                (0.00529462265, -0.003078684848, 0.5237753852), 0.0387726605),
    'goal': ((3.62068587, -2.839304229, 3.306177123),
             (0.01384845874, -0.004846037656, 0.5261426936), 0.06986794003),
    'mean': ((1.49844447, -1.893184131, 2.671668856),
             (0.009486749305, -0.003228098661, 0.5259284924), 0.05306835577),
    'blend': ((1.622349527, -2.717161987, 2.562032673),
              (0.009028764032, -0.003972712724, 0.5263255756), 0.05213992429),
}


@pytest.mark.parametrize('choice', CHOICES)
def test_the_golden_run_ends_where_it_did(choice):
    """General start, 100 samples of 0.04 s, gain 0.5."""
    outcome = battery.run(battery.starts()[3:4], replace(BARE, interaction=choice), samples=100)[0]
    vector, translation, error = GOLDEN[choice]
    np.testing.assert_allclose(vector_deg(outcome.end), vector, rtol=1e-7, atol=1e-7)
    np.testing.assert_allclose(outcome.end[:3, 3], translation, atol=1e-8)
    xy = pose.image(outcome.end, battery.square())[0]
    assert np.linalg.norm(xy - pose.image(battery.home(), battery.square())[0]) == pytest.approx(
        error, rel=1e-7)


def test_the_golden_run_is_the_same_with_scipys_exponential_and_numpys_pinv():
    T = battery.starts()[3]
    goal_xy, _ = pose.image(battery.home(), battery.square())
    for _ in range(100):
        X = battery.square() @ T[:3, :3].T + T[:3, 3]
        x, y, z = (X[:, :2] / X[:, 2:]).T[0], (X[:, :2] / X[:, 2:]).T[1], X[:, 2]
        rows = []
        for a, b, d in zip(x, y, z, strict=True):
            rows += [[-1 / d, 0, a / d, a * b, -1 - a * a, b],
                     [0, -1 / d, b / d, 1 + b * b, -a * b, -a]]
        error = (np.stack([x, y], axis=-1) - goal_xy).ravel()
        v, w = np.split(-0.5 * np.linalg.pinv(np.array(rows)) @ error, 2)
        generator = np.zeros((4, 4))
        generator[:3, :3] = [[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]]
        generator[:3, 3] = v
        T = scipy.linalg.expm(-0.04 * generator) @ T
    outcome = battery.run(battery.starts()[3:4], replace(BARE, interaction='current'), samples=100)
    np.testing.assert_allclose(outcome[0].end, T, atol=1e-10)


@pytest.mark.parametrize('gain, step, share, count', [(0.5, 0.04, 0.01, 228), (2, 0.05, 0.05, 29),
                                                      (30, 0.05, 0.01, 7)])
def test_a_sideways_error_decays_by_one_minus_gain_times_step(gain, step, share, count):
    """DEC; beyond gain * step = 1 the sign alternates."""
    start = rotated((0, 0, 0), (0.05, 0.0, 0.5))
    before, after = (battery.run(start[None], replace(BARE, interaction='mean'), gain=gain,
                                 step=step, samples=n)[0].end[0, 3] for n in (count - 1, count))
    assert abs(after) <= share * 0.05 < abs(before)
    assert after == pytest.approx((1 - gain * step) ** count * 0.05, rel=1e-6)


def flight(start, choice, seconds, *, corners=None, gain=1.0, until=None):
    """Return continuous motion (3, 4) under the law: SciPy's Runge-Kutta of order 8, dense.

    It ends early where `until`, of a pose (3, 4), becomes zero.
    """
    settings = replace(BARE, interaction=choice)

    def rates(_, rows):
        T = np.vstack([rows.reshape(3, 4), (0, 0, 0, 1)])
        v, w = np.split(law.twists(*_stacked(T, corners), settings, gain=gain), 2)
        return (-np.cross(w, T[:3], axisb=0, axisc=0) - np.outer(v, T[3])).ravel()

    def event(_, rows):
        return until(rows.reshape(3, 4))

    event.terminal = True
    found = scipy.integrate.solve_ivp(rates, (0, seconds), start[:3].ravel(), method='DOP853',
                                      rtol=1e-10, atol=1e-12, dense_output=True,
                                      events=None if until is None else event)
    return found.t[-1], lambda time: found.sol(time).reshape(3, 4)


ROLLS = {30: (1.03527618, 1.032690929, 10.950034, 10.927298, 11.25926),
         60: (1.154700538, 1.141493129, 21.325857, 21.198644, 23.982318),
         90: (1.414213562, 1.367284712, 30.198408, 30.155558, 40.395063),
         120: (2, 1.818580067, 35.407423, 37.155707, 65.009424),
         150: (3.863703305, 2.751019795, 30.399206, 41.629089, 107.8637),
         170: (11.47371325, 3.606347712, 13.3194, 42.99733, 153.24498)}


@pytest.mark.parametrize('degrees', list(ROLLS))
def test_a_pure_roll_follows_its_closed_form(degrees):
    """4.3: current retreats to 1 / cos(a / 2) at ln 2, both means turn on the spot."""
    peak, away, *angles = ROLLS[degrees]
    for choice, angle in zip(('current', 'mean', 'blend'), angles, strict=True):
        _, at = flight(rotated((0, 0, degrees)), choice, 1.0)
        assert np.linalg.norm(vector_deg(at(1.0))) == pytest.approx(angle, rel=1e-6), choice
        if choice == 'current':
            assert at(np.log(2))[2, 3] / 0.5 == pytest.approx(peak, rel=1e-6)
            assert at(1.0)[2, 3] / 0.5 == pytest.approx(away, rel=1e-6)
        else:
            np.testing.assert_allclose(at(1.0)[:, 3], (0, 0, 0.5), atol=1e-9)


def test_nearly_half_a_turn_takes_the_camera_a_hundred_times_as_far_away():
    _, at = flight(rotated((0, 0, 179)), 'current', 1.0)
    assert at(np.log(2))[2, 3] / 0.5 == pytest.approx(114.5930135, rel=1e-5)


@pytest.mark.parametrize('degrees, turned, nearest', [
    (30, 15.086869, 0.9655323074), (60, 30.725835, 0.8596219811), (90, 47.653541, 0.6736120292),
    (120, 67.186403, 0.387734349), (140, None, 0.1198398874)])
def test_with_the_goal_matrix_a_roll_leads_as_near_the_target_as_published(
        degrees, turned, nearest):
    """4.3: 1 - (roll - a) tan(a / 2) with a to go, nearest where a + sin(a) is the roll."""
    angle = scipy.optimize.brentq(lambda a: a + np.sin(a) - np.radians(degrees), 0, np.pi)

    def left(T):
        return np.arctan2(T[1, 0], T[0, 0]) - angle

    time, at = flight(rotated((0, 0, degrees)), 'goal', 10.0, until=left)
    assert at(time)[2, 3] / 0.5 == pytest.approx(nearest, rel=1e-6)
    for T in (at(0.3 * time), at(0.8 * time)):
        to_go = left(T) + angle
        along = 1 - (np.radians(degrees) - to_go) * np.tan(to_go / 2)
        assert T[2, 3] / 0.5 == pytest.approx(along, rel=1e-6)
    for near in (time - 0.01, time + 0.01):
        assert at(near)[2, 3] > at(time)[2, 3]
    if turned is not None:
        assert np.degrees(angle) == pytest.approx(turned, abs=1e-6)


@pytest.mark.parametrize('degrees', [30, 90, 150, 170])
def test_the_first_twist_of_a_pure_roll_has_its_closed_form(degrees):
    angle = np.radians(degrees)
    start = rotated((0, 0, degrees))
    asked = {choice: _first(start, choice) for choice in CHOICES}
    away = 0.5 * (1 - np.cos(angle))
    np.testing.assert_allclose(asked['current'][[2, 5]], [-away, np.sin(angle)], atol=1e-9)
    np.testing.assert_allclose(asked['goal'][[2, 5]], [away, np.sin(angle)], atol=1e-9)
    np.testing.assert_allclose(asked['mean'][[2, 5]], [0, 2 * np.tan(angle / 2)], atol=1e-8)
    np.testing.assert_allclose(asked['blend'][[2, 5]], [0, np.sin(angle)], atol=1e-9)
    polar = law.twists(*_stacked(start), replace(BARE, kind='polar'), gain=1.0)
    np.testing.assert_allclose(polar, [0, 0, 0, 0, 0, angle], atol=1e-9)


def _stacked(start, corners=None, goal=None):
    corners = battery.square() if corners is None else corners
    xy, depths = pose.image(start, corners)
    goal_xy, goal_depths = pose.image(battery.home() if goal is None else goal, corners)
    return xy, goal_xy, depths, goal_depths


def _first(start, choice, **more):
    return law.twists(*_stacked(start, **more), replace(BARE, interaction=choice), gain=1.0)


def test_half_a_turn_defeats_all_four_matrices():
    """R-180: retreat, advance, loss of rank, and no speed at the largest error."""
    start = rotated((0, 0, 180))
    np.testing.assert_allclose(_first(start, 'current')[[2, 5]], [-1, 0], atol=1e-9)
    np.testing.assert_allclose(_first(start, 'goal')[[2, 5]], [1, 0], atol=1e-9)
    np.testing.assert_allclose(_first(start, 'blend'), np.zeros(6), atol=1e-9)
    xy, goal_xy, depths, goal_depths = _stacked(start)
    stack = law.stacks_of(xy, goal_xy, depths, goal_depths, replace(BARE, interaction='mean'))[0]
    assert np.linalg.matrix_rank(stack, 1e-9) == 4


@pytest.mark.parametrize('roll, current, blend', [
    (40, 0.111928687, 0.004249986536), (20, 0.02885217117, 0.0005562156321),
    (10, 0.007268253342, 0.000070326746), (5, 0.001820527163, 8.815991952e-06)])
def test_a_roll_before_a_tilted_plane_moves_the_camera_only_without_the_mean_matrix(
        roll, current, blend):
    """RT: plane tilted by 30 degrees."""
    goal = rotated((30, 0, 0))
    start = rotated((0, 0, roll), (0, 0, 0)) @ goal
    first = {choice: np.linalg.norm(_first(start, choice, goal=goal)[:3]) for choice in CHOICES}
    assert first['current'] == pytest.approx(current, abs=1e-8)
    assert first['goal'] == pytest.approx(current, abs=1e-8)
    assert first['blend'] == pytest.approx(blend, abs=1e-8)
    assert first['mean'] < 1e-9


def test_an_advance_follows_its_closed_form():
    """4.4: vz(0), and the time to 1 % of the distance, gain 1, from 2, 0.5 and 4 times as far."""
    starts = np.array([rotated((0, 0, 0), (0, 0, 0.5 * ratio)) for ratio in (2.0, 0.5, 4.0)])
    table = {'current': ((1, -0.125, 6), (3.9219733, 4.5951198, 4.3274384)),
             'goal': ((0.25, -0.5, 0.375), (5.5951702, 3.422023, 8.6937825)),
             'mean': ((0.4, -0.2, 0.7058823529), (4.7585718, 4.0085714, 6.5106105)),
             'blend': ((0.625, -0.3125, 3.1875), (4.4688002, 3.8252994, 5.1741937))}
    for choice, (speeds, times) in table.items():
        for start, speed, time in zip(starts, speeds, times, strict=True):
            np.testing.assert_allclose(_first(start, choice), (0, 0, speed, 0, 0, 0), atol=1e-9)
            found, _ = flight(start, choice, 20.0,
                              until=lambda T: abs(T[2, 3] / 0.5 - 1) - 0.01)
            assert found == pytest.approx(time, rel=1e-6), choice


def test_the_mean_matrix_is_right_to_third_order_and_the_others_to_second():
    """ORD (Malis 2004; Lapreste & Mezouar 2004, from memory)."""
    goal = rotated((20, -10, 0), (0.02, 0.01, 0.5))
    x = np.array([0.04, -0.02, 0.06, *np.radians([12, -8, 20])])
    expected = {0.4: (0.0162784, 0.0154416, 0.000511576), 0.1: (0.000940815, 0.000930541,
                                                                6.64786e-06)}
    for k, residuals in expected.items():
        xy, goal_xy, depths, goal_depths = _stacked(motion.exp(-k * x) @ goal, goal=goal)
        for choice, residual in zip(('current', 'goal', 'mean'), residuals, strict=True):
            stack = law.stacks_of(xy, goal_xy, depths, goal_depths,
                                  replace(BARE, interaction=choice))[0]
            left = np.linalg.norm((xy - goal_xy).ravel() - stack @ (k * x))
            assert left == pytest.approx(residual, rel=1e-4), (k, choice)


def test_three_points_decay_exactly_and_end_at_a_wrong_pose():
    """TRI: every error shrinks by 1 / e in 1 / gain; it ends at zero, 31.8 degrees off."""
    corners, start = battery.square()[:3], battery.TASKS[3].pose
    xy, goal_xy, _, _ = _stacked(start, corners)
    _, at = flight(start, 'current', 50.0, corners=corners, gain=0.5)
    tau, end = at(2.0), at(50.0)
    np.testing.assert_allclose(vector_deg(tau), (8.630620204, -24.23850728, 3.104835986),
                               atol=1e-6)
    np.testing.assert_allclose(tau[:, 3], (0.02147331369, 0.0001713634781, 0.5289338681),
                               atol=1e-8)
    np.testing.assert_allclose(pose.image(tau, corners)[0] - goal_xy, (xy - goal_xy) / np.e,
                               atol=1e-9)
    np.testing.assert_allclose(vector_deg(end), (7.818908569, -30.60985966, -3.922971531),
                               atol=1e-6)
    np.testing.assert_allclose(end[:, 3], (0.01299994725, 0.01299994723, 0.4440584744),
                               atol=1e-8)
    assert np.linalg.norm(vector_deg(end)) == pytest.approx(31.83533486, abs=1e-6)
    np.testing.assert_allclose(pose.image(end, corners)[0], goal_xy, atol=1e-9)


def test_three_points_have_four_poses_and_the_law_rests_at_each():
    """P3P: OpenCV finds them; no law can tell them apart, hence at least four points."""
    corners = np.array([(-0.1, -0.1, 0), (0.1, -0.1, 0), (0.1, 0.1, 0)])
    goal = rotated((8, -5, 20), (0.01, -0.02, 0.5))
    goal_xy = np.ascontiguousarray(pose.image(goal, corners)[0])
    count, vectors, shifts = cv2.solveP3P(corners, goal_xy, np.eye(3), None,
                                          flags=cv2.SOLVEPNP_AP3P)
    assert count == 4
    poses = [motion.pose_from_parts(motion.rotation_from_vector(vector.ravel()), shift.ravel())
             for vector, shift in zip(vectors, shifts, strict=True)]
    apart = sorted(tuple(np.linalg.norm(corners @ T[:3, :3].T + T[:3, 3], axis=-1)) for T in poses)
    np.testing.assert_allclose(apart, [(0.4328676237, 0.5137503466, 0.541154209),
                                       (0.5013448779, 0.5236910052, 0.538194494),
                                       (0.5186293605, 0.4471415762, 0.5285853825),
                                       (0.5252700054, 0.4928863457, 0.3749445289)], atol=1e-6)
    for T in poses:
        for choice in CHOICES:
            assert np.abs(_first(T, choice, corners=corners, goal=goal)).max() < 1e-6
    four = np.vstack([corners, (-0.1, 0.1, 0)])
    moves = [np.abs(_first(T, 'current', corners=four, goal=goal)).max() for T in poses]
    assert sum(move > 1e-3 for move in moves) == 3


@pytest.mark.parametrize('tilt, distance, end_tilt, shift, error', [
    (45, 0.5, -29.28113326, (0, -0.01952219693, 0.5459650719), 0.1024373045),
    (30, 1.0, -24.5097735, (0, -0.008201484773, 1.023835027), 0.01896708651)])
def test_a_mirrored_tilt_ends_in_a_spurious_equilibrium(tilt, distance, end_tilt, shift, error):
    """LM-A, LM-B (Chaumette 1998 reports such minima): rest with an error that stays.

    It is the second minimum of the planar pose, which OpenCV's IPPE lists as well.
    """
    goal, start = rotated((tilt, 0, 0), (0, 0, distance)), rotated((-tilt, 0, 0), (0, 0, distance))
    settings = replace(BARE, interaction='current')
    end = battery.run(start[None], settings, goal=goal, gain=1.0, step=0.05, samples=1000)[0].end
    np.testing.assert_allclose(vector_deg(end), (end_tilt, 0, 0), atol=1e-4)
    np.testing.assert_allclose(end[:3, 3], shift, atol=1e-5)
    xy, goal_xy, depths, goal_depths = _stacked(end, goal=goal)
    assert np.linalg.norm(xy - goal_xy) == pytest.approx(error, rel=1e-5)
    twist = law.twists(xy, goal_xy, depths, goal_depths, settings, gain=1.0)
    assert np.linalg.norm(twist) < 1e-9
    slowest = -np.linalg.eigvals(_slopes(end, goal)).real.max()
    assert slowest > 0.5
    if tilt == 45:
        assert slowest == pytest.approx(0.648211, rel=1e-5)
    found = cv2.solvePnPGeneric(battery.square(), np.ascontiguousarray(goal_xy), np.eye(3), None,
                                flags=cv2.SOLVEPNP_IPPE)[1]
    assert len(found) == 2


def _slopes(end, goal):
    """Return the derivative (6, 6) of the twist by the displacement of the camera from `end`."""
    moved = [[_first(motion.exp(-way * step) @ end, 'current', goal=goal) for way in (1, -1)]
             for step in 1e-5 * np.eye(6)]
    return np.array([(ahead - behind) / 2e-5 for ahead, behind in moved]).T


def test_three_points_lose_rank_on_their_cylinder_and_a_fourth_restores_it():
    """CYL (Michel & Rives 1993, from memory)."""
    angles = np.radians([90, 210, 330, 0])
    corners = np.stack([0.12 * np.cos(angles), 0.12 * np.sin(angles), 0 * angles], axis=-1)
    eye = np.array([0.12 * np.cos(np.radians(35)), 0.12 * np.sin(np.radians(35)), -0.5])

    def smallest(points, place, at=None):
        X = points - place
        if at is not None:
            X = X @ scipy.spatial.transform.Rotation.align_vectors(
                [[0, 0, 1]], [at - place])[0].as_matrix().T
        return np.linalg.svd(interaction.points(X[:, :2] / X[:, 2:], X[:, 2]),
                             compute_uv=False)[-1]

    assert smallest(corners[:3], np.array([0, 0, -0.5])) == pytest.approx(0.04435757663, rel=1e-8)
    # The rank holds for any attitude, the value for a camera that looks at the points' middle.
    for at in (None, np.zeros(3), corners.mean(axis=0)):
        assert smallest(corners[:3], eye, at) < 1e-12
        assert smallest(corners, eye, at) > 0.02
    assert smallest(corners, eye, corners.mean(axis=0)) == pytest.approx(0.02593571118, rel=1e-8)


def test_four_points_out_of_a_plane_have_singular_places_and_coplanar_ones_have_none():
    """SING4 (Pascual-Escudero et al. 2021), COP4: 400 random cases."""
    cloud = np.array([(0.1, 0, 0.02), (-0.06, 0.09, -0.03), (-0.05, -0.08, 0.05),
                      (0.02, 0.03, -0.09)])
    places = np.array([(0.04491325157, 0.1416852138, 0.08256320252),
                       (0.03589000669, -0.0684973255, 0.07650582105),
                       (-0.1124831077, 0.009149770101, 0.0476209533),
                       (-0.05610333421, -0.1250405857, -0.06079460748)])
    for place in places:
        # Any attitude of the camera will do: turn it so that all depths are far from zero.
        away = scipy.spatial.transform.Rotation.align_vectors([[0, 0, 1]], [-place])[0].as_matrix()
        X = (cloud - place) @ away.T
        values = np.linalg.svd(interaction.points(X[:, :2] / X[:, 2:], X[:, 2]), compute_uv=False)
        assert values[-1] / values[0] < 1e-7
    rng = np.random.default_rng(11)
    for _ in range(400):
        flat = np.append(rng.uniform(-0.1, 0.1, (4, 2)), np.zeros((4, 1)), axis=1)
        sides = [np.linalg.det(np.append(np.delete(flat, k, 0)[:, :2], np.ones((3, 1)), axis=1))
                 for k in range(4)]
        if min(np.abs(sides)) < 2e-3:
            continue
        X = flat - np.array([*rng.uniform(-0.2, 0.2, 2), -rng.uniform(0.2, 0.8)])
        values = np.linalg.svd(interaction.points(X[:, :2] / X[:, 2:], X[:, 2]), compute_uv=False)
        assert values[-1] / values[0] > 1e-5
