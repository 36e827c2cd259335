# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The servo between views and twists: time, trust, paths, depth, drift, and what it refuses."""

from __future__ import annotations

import tracemalloc
from dataclasses import dataclass, field, replace

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control import law, pose, prediction, target
from servo_nodes.control.law_settings import (
    DampingSettings,
    DepthSettings,
    LawSettings,
    PathSettings,
    PredictionSettings,
    TargetSettings,
    WeightSettings,
)
from servo_nodes.control.servo import Servo
from servo_nodes.offline import battery
from servo_nodes.values import SECOND_NS, View

CAMERA = Camera(640, 480, 500.0, 500.0, 320.0, 240.0)
MS = SECOND_NS // 1000
PLAIN = LawSettings(
    gain=0.5, gain_boost=1.0, interaction='current', start_rate=200.0,
    weights=WeightSettings(estimator='none'), damping=DampingSettings(below=0.0),
    path=PathSettings(mode='direct'), prediction=PredictionSettings(enabled=False))


def seen(T_CO, stamp=0, corners=None, **changes):
    corners = battery.square() if corners is None else corners
    xy, depths = pose.image(T_CO, corners)
    goal_xy, goal_depths = pose.image(battery.home(), corners)
    fields = {'points_xy': xy, 'goal_xy': goal_xy, 'depths': depths, 'goal_depths': goal_depths,
              'weights': np.ones(len(xy)), 'ids': np.arange(len(xy)), **changes}
    return View(stamp, 'camera', **fields)


def ready(settings=PLAIN):
    servo = Servo(settings)
    servo.calibrate(CAMERA)
    return servo


def plate(count=50, seed=3):
    rng = np.random.default_rng(seed)
    return np.append(rng.uniform(-0.12, 0.12, (count, 2)), np.zeros((count, 1)), axis=1)


@dataclass
class Plant:
    """A camera that carries out twists exactly, late, and shows images that are late as well."""

    servo: Servo
    now: np.ndarray
    corners: np.ndarray = field(default_factory=plate)
    lag_ms: int = 0
    age_ms: int = 0
    image_ms: int = 10
    cap: tuple[float, float] = (np.inf, np.inf)
    drift: np.ndarray = field(default_factory=lambda: np.zeros(6))
    noise_px: float = 0.0

    def run(self, seconds, step_ms=10, change=None, unknown=()):
        """Return times s, poses of the target in the camera, and solutions of every tick."""
        rng = np.random.default_rng(1)
        twists, shown, track = [], [], []
        for k in range(round(1000 * seconds / step_ms)):
            t = k * step_ms
            if t % self.image_ms == 0:
                shown.append((t, self.now.copy()))
            while shown and t - shown[0][0] >= self.age_ms:
                stamp, then = shown.pop(0)
                view = seen(then, stamp * MS, self.corners)
                fields = dict.fromkeys(unknown, np.full(len(self.corners), np.nan))
                fields['points_xy'] = view.points_xy + rng.normal(
                    0, self.noise_px / 500 + 1e-15, view.points_xy.shape)
                self.servo.observe(replace(view, **fields))
            solution = self.servo.solve(t * MS)
            twist = np.zeros(6) if solution is None else solution.twist
            over = max(np.linalg.norm(twist[:3]) / self.cap[0],
                       np.linalg.norm(twist[3:]) / self.cap[1], 1.0)
            twist = twist / over
            self.servo.record(twist, t * MS)
            twists.append(twist)
            late = len(twists) - 1 - self.lag_ms // step_ms
            acting = twists[late] if late >= 0 else np.zeros(6)
            track.append((t / 1000, self.now.copy(), solution))
            self.now = motion.exp(-acting * step_ms / 1000) @ self.now
            self.now = motion.exp(self.drift * step_ms / 1000) @ self.now
        return track


@pytest.mark.parametrize('choice', ['current', 'goal', 'mean', 'blend'])
def test_the_live_twist_is_that_of_the_stateless_law(choice):
    """The fused normal equations and the stacked law agree, weights and missing axes included."""
    corners, T = plate(), battery.TASKS[3].pose
    weights = np.random.default_rng(2).uniform(0.1, 1, len(corners))
    for mask in ((1,) * 6, (1, 1, 1, 0, 0, 1)):
        settings = replace(PLAIN, interaction=choice, mask=mask)
        servo = ready(settings)
        view = seen(T, corners=corners, weights=weights)
        servo.observe(view)
        solution = servo.solve(0)
        expected = law.twists(view.points_xy, view.goal_xy, view.depths, view.goal_depths,
                              settings, weights=weights)
        np.testing.assert_allclose(solution.twist, expected, atol=1e-9)
        axes = [k for k in range(6) if mask[k]]
        rows = {'current': (1, 0), 'goal': (0, 1), 'mean': (0.5, 0.5), 'blend': (1, 0)}[choice]
        stack = (rows[0] * law.interaction.points(view.points_xy, view.depths)
                 + rows[1] * law.interaction.points(view.goal_xy, view.goal_depths))
        values = np.linalg.svd(stack[:, axes] * np.repeat(weights, 2)[:, None], compute_uv=False)
        here = law.interaction.points(view.points_xy, view.depths)[:, axes]
        itself = np.linalg.svd(here * np.repeat(weights, 2)[:, None], compute_uv=False)
        assert solution.smallest == pytest.approx(itself[-1], rel=1e-7)
        servo.begin(0)
        solution = servo.solve(0)
        assert solution.smallest == pytest.approx(values[-1], rel=1e-7)
        assert solution.condition == pytest.approx(values[0] / values[-1], rel=1e-7)


@pytest.mark.parametrize('kind', ['polar', 'partitioned', 'hybrid', 'pose'])
def test_every_kind_of_law_runs_live(kind):
    settings = replace(PLAIN, kind=kind, gain=2.0)
    plant = Plant(ready(settings), battery.TASKS[3].pose)
    track = plant.run(4.0)
    assert track[0][2].error_px > 50 and track[-1][2].error_px < 0.5


def test_scatter_and_error_are_in_physical_units():
    """PN: 1 px of noise, square at 0.5 m, f = 500 px."""
    servo = ready()
    servo.observe(seen(battery.home()))
    solution = servo.solve(0)
    np.testing.assert_allclose(solution.scatter, 2 * np.array(
        [0.006504805916, 0.006504805916, 0.0008838834765, 0.0125, 0.0125, 0.001767766953]),
        rtol=1e-8)
    assert solution.error_px == pytest.approx(0, abs=1e-6)
    xy = seen(battery.home()).points_xy
    servo.observe(seen(battery.home(), points_xy=xy + [3 / 500, 4 / 500], stamp=1))
    assert servo.solve(1).error_px == pytest.approx(5.0, rel=1e-9)


def test_without_a_camera_or_points_there_is_no_answer():
    servo = Servo(PLAIN)
    servo.observe(seen(battery.home()))
    assert servo.solve(0) is None
    servo = ready()
    assert servo.solve(0) is None
    servo.observe(View.empty(0, 'camera'))
    assert servo.solve(0) is None
    servo.observe(seen(battery.home(), weights=np.zeros(4)))
    assert servo.solve(0) is None
    servo.observe(seen(battery.home(), points_xy=np.full((4, 2), np.nan)))
    assert servo.solve(0) is None


def test_points_that_are_not_finite_or_have_no_weight_are_left_out():
    view = seen(battery.TASKS[3].pose, corners=plate())
    xy, weights = view.points_xy.copy(), view.weights.copy()
    xy[7, 1], xy[9, 0], weights[3], weights[4] = np.nan, np.inf, 0, np.nan
    servo = ready()
    servo.observe(replace(view, points_xy=xy, weights=weights))
    solution = servo.solve(0)
    keep = np.setdiff1d(np.arange(50), [3, 4, 7, 9])
    expected = law.twists(xy[keep], view.goal_xy[keep], view.depths[keep], view.goal_depths[keep],
                          PLAIN)
    assert solution.points == 46
    np.testing.assert_allclose(solution.twist, expected, atol=1e-9)


def test_unknown_depths_come_from_the_goal_and_then_from_a_constant():
    view = seen(battery.TASKS[3].pose)
    nothing = np.full(4, np.nan)
    servo = ready(replace(PLAIN, depth=DepthSettings(observe=False, fallback=0.8)))
    servo.observe(replace(view, depths=nothing))
    with_goal = servo.solve(0).twist
    np.testing.assert_allclose(with_goal, law.twists(
        view.points_xy, view.goal_xy, view.goal_depths, view.goal_depths, PLAIN), atol=1e-9)
    servo.observe(replace(view, depths=nothing, goal_depths=nothing))
    constant = np.full(4, 0.8)
    np.testing.assert_allclose(servo.solve(0).twist, law.twists(
        view.points_xy, view.goal_xy, constant, constant, PLAIN), atol=1e-9)


@pytest.mark.parametrize('estimator', ['tukey', 'huber'])
def test_one_bad_point_in_six_moves_the_twist_by_less_than_one_percent(estimator):
    """WT (Comport, Marchand & Chaumette 2006): 40 px off. Huber only limits the pull."""
    corners = np.vstack([battery.square(), [(0.05, 0.02, 0), (-0.03, 0.06, 0)]])
    start = motion.pose_from_parts(motion.rotation_from_vector(np.radians([0, 0, 5])),
                                   (0.02, -0.01, 0.55))
    settings = replace(PLAIN, weights=WeightSettings(estimator=estimator))
    clean = np.array([0.01047878509, -0.00643778401, 0.02634889617, 0, 0, 0.04793565851])
    for bad in range(6):
        servo = ready(settings)
        view = seen(start, corners=corners)
        xy = view.points_xy.copy()
        xy[bad, 0] += 40 / 500
        servo.observe(replace(view, points_xy=xy))
        off = np.linalg.norm(servo.solve(0).twist - clean) / np.linalg.norm(clean)
        none = ready(PLAIN)
        none.observe(replace(view, points_xy=xy))
        drawn = np.linalg.norm(none.solve(0).twist - clean) / np.linalg.norm(clean)
        assert off < (0.01 if estimator == 'tukey' else 0.5 * drawn), bad
        assert drawn > 0.3


def test_a_point_that_turns_bad_later_loses_its_weight_at_once():
    corners, T = plate(), battery.TASKS[3].pose
    servo = ready(replace(PLAIN, weights=WeightSettings()))
    servo.observe(seen(T, 0, corners))
    before = servo.solve(0)
    xy = seen(T, 1, corners).points_xy.copy()
    xy[:5] += 0.1
    servo.observe(seen(T, 1, corners, points_xy=xy))
    after = servo.solve(1)
    assert before.points == 50 and after.points == 45
    np.testing.assert_allclose(after.twist, before.twist, rtol=0.05, atol=1e-3)


def test_weights_never_vote_among_fewer_than_six_points():
    servo = ready(replace(PLAIN, weights=WeightSettings()))
    view = seen(battery.TASKS[3].pose)
    servo.observe(replace(view, points_xy=view.points_xy + [[0.1, 0], [0, 0], [0, 0], [0, 0]]))
    assert servo.solve(0).points == 4


def test_the_start_is_smooth_and_follows_the_published_curve():
    """SS (Mansard & Chaumette 2007): gain 0.5, rate 5; sideways: the matrix is constant."""
    start = motion.pose_from_parts(np.eye(3), (0.05, 0, 0.5))
    servo = ready(replace(PLAIN, start_rate=5.0))
    servo.begin(0)
    track = Plant(servo, start, corners=battery.square()).run(2.0, step_ms=1)
    speeds = np.array([np.linalg.norm(solution.twist) for _, _, solution in track])
    assert speeds[0] == 0
    peak = int(speeds.argmax())
    assert track[peak][0] == pytest.approx(0.5116855762, abs=0.004)
    assert speeds[peak] == pytest.approx(0.7742636827 * 0.5 * 0.05, rel=6e-3)
    assert track[-1][1][0, 3] / 0.05 == pytest.approx(0.4087498902, rel=2e-3)


@pytest.mark.parametrize('times_gain, overshoot', [
    (0.1, 0), (0.2, 0), (0.367879, 0), (0.5, 0.0405196), (0.7854, 0.2873873), (1.0, 0.5)])
def test_dead_time_overshoots_as_published_without_prediction(times_gain, overshoot):
    """4.2: an integrator with gain and pure dead time; sideways, in steps of 1/100 of it."""
    found = _overshoot(times_gain, predict=False)
    assert found == pytest.approx(overshoot, abs=0.02)


@pytest.mark.parametrize('times_gain', [0.5, 1.0, 1.5])
def test_prediction_takes_the_overshoot_out_of_dead_time(times_gain):
    assert _overshoot(times_gain, predict=True) < 0.05


def _overshoot(times_gain, predict):
    """Return the overshoot of a sideways step; dead time 200 ms, half image age, half arm."""
    settings = replace(PLAIN, gain=times_gain / 0.2, prediction=PredictionSettings(
        enabled=predict, delay=0.1))
    start = motion.pose_from_parts(np.eye(3), (0.02, 0, 0.5))
    plant = Plant(ready(settings), start, corners=battery.square(), lag_ms=100, age_ms=100,
                  image_ms=2)
    track = plant.run(2.5, step_ms=2)
    return max(0.0, -min(T[0, 3] for _, T, _ in track) / 0.02)


def test_prediction_with_a_general_motion_and_slow_images_settles_without_overshoot():
    """Gain times dead time = 1 with images at 30/s: the error never rises beyond 5 % again."""
    settings = LawSettings(gain=5.0, gain_boost=1.0, start_rate=200.0,
                           prediction=PredictionSettings(delay=0.1))
    plant = Plant(ready(settings), battery.TASKS[3].pose, lag_ms=100, age_ms=100, image_ms=30)
    errors = np.array([solution.error_px for _, _, solution in plant.run(3.0) if solution])
    low = np.minimum.accumulate(errors)
    assert (errors - low).max() < 0.05 * errors[0]
    assert errors[-1] < 0.1


@given(st.tuples(*[st.floats(-2, 2)] * 6), st.floats(0, 1.5))
def test_the_motion_in_plain_numbers_is_the_exact_one(twist, duration):
    w, v = np.array(twist[3:]), np.array(twist[:3])
    generator = np.zeros((4, 4))
    generator[:3, :3] = [[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]]
    generator[:3, 3] = v
    np.testing.assert_allclose(prediction.rigid(twist, duration),
                               scipy.linalg.expm(duration * generator), atol=1e-12)


@given(st.lists(st.tuples(*[st.floats(-0.5, 0.5)] * 6).map(np.array), min_size=1, max_size=8),
       st.integers(0, 75), st.integers(0, 120))
def test_the_odometer_adds_up_what_was_sent(twists, first, last):
    """Twists of 10 ms each; the motion between any two times is the product of the parts."""
    odometer = prediction.Odometer()
    for k, twist in enumerate(twists):
        odometer.record(twist, k * 10 * MS)
    moved = odometer.passage(first * MS, last * MS)
    expected = np.eye(4)
    for t in range(first, max(first, last)):
        k = min(t // 10, len(twists) - 1)
        expected = expected @ motion.exp(twists[k] * 0.001)
    found = np.eye(4) if moved is None else np.linalg.inv(moved)
    np.testing.assert_allclose(found, expected, atol=1e-9)


def test_the_odometer_stays_exact_over_many_ticks_and_forgets_when_time_runs_back():
    odometer = prediction.Odometer()
    twist = np.array([0.1, 0.0, 0.02, 0.1, -0.2, 0.5])
    for k in range(5000):
        odometer.record(twist, k * 10 * MS)
    moved = odometer.passage(49_800 * MS, 50_000 * MS)
    np.testing.assert_allclose(moved, motion.exp(-0.2 * twist), atol=1e-12)
    odometer.record(twist, 10 * MS)
    assert odometer.passage(0, 5 * MS) is None


def test_a_point_that_prediction_would_put_behind_the_camera_stays():
    rays = prediction.homogeneous(np.array([[0.1, 0.0], [0.0, 0.0]]), np.array([0.5, 0.05]))
    xy, inverse = prediction.moved(rays, motion.exp([0, 0, -0.1, 0, 0, 0]))
    np.testing.assert_allclose(xy[:, 1], 0)
    assert inverse[1] == pytest.approx(20)
    np.testing.assert_allclose(xy[:, 0], [0.125, 0])


def test_a_drifting_target_leaves_the_known_error_and_none_when_followed():
    """RAMP: steady error r / gain, image rate r = 0.01 1/s at gain 0.5: 0.02, i.e. 10 px."""
    drift = np.array([0.01 * 0.5, 0, 0, 0, 0, 0])
    lagging = Plant(ready(), battery.home(), drift=drift).run(20.0)[-1][2]
    assert lagging.error_px == pytest.approx(10.0, rel=0.02)
    settings = replace(PLAIN, target=TargetSettings(moves=True, index=0.02))
    following = Plant(ready(settings), battery.home(), drift=drift, image_ms=30).run(20.0)[-1][2]
    assert following.error_px < 0.1


@pytest.mark.parametrize('index, alpha, beta', [(0.1, 0.36, 0.08), (1.0, 0.75, 0.5)])
def test_kalatas_gains_are_the_published_ones_and_the_riccati_solution(index, alpha, beta):
    found = target.gains(index)
    assert found == pytest.approx((alpha, beta), abs=1e-9)
    F, H = np.array([[1.0, 1], [0, 1]]), np.array([[1.0, 0]])
    G = np.array([[0.5], [1.0]]) * index
    P = scipy.linalg.solve_discrete_are(F.T, H.T, G @ G.T, np.eye(1))
    gain = (P @ H.T / (H @ P @ H.T + 1)).ravel()
    assert found == pytest.approx(tuple(gain), abs=1e-6)


def test_unknown_depths_are_learnt_from_the_cameras_own_motion():
    """Goal depth 0.5 m is wrong for points seen at 0.8 m; sideways motion tells."""
    settings = replace(PLAIN, depth=DepthSettings(gain=3000.0))
    servo = ready(settings)
    T = motion.pose_from_parts(np.eye(3), (-0.05, 0, 0.8))
    twist = np.array([0.08, 0, 0, 0, 0, 0])
    for k in range(60):
        if k % 3 == 0:
            servo.observe(seen(T, k * 20 * MS, depths=np.full(4, np.nan)))
        servo.record(twist, k * 20 * MS)
        T = motion.exp(-twist * 0.02) @ T
    np.testing.assert_allclose(servo._sight.depths, 0.8, rtol=0.03)


def test_a_long_roll_is_led_along_a_path_and_half_a_turn_succeeds():
    """R-180 under caps, dead time and noise, with every interaction."""
    start = motion.pose_from_parts(motion.rotation_from_vector([0, 0, np.pi]), (0.02, 0.01, 0.6))
    for choice in ('goal', 'mean'):
        servo = ready(LawSettings(interaction=choice, prediction=PredictionSettings(delay=0.05)))
        servo.begin(0)
        plant = Plant(servo, start, lag_ms=50, age_ms=50, image_ms=30, cap=(0.1, 0.5),
                      noise_px=0.1)
        track = plant.run(16.0)
        assert max(solution.left for _, _, solution in track if solution) == 1.0
        assert track[-1][2].left == 0 and track[-1][2].error_px < 1.0
        reach = [500 * np.linalg.norm(pose.image(T, plate())[0], axis=-1).max()
                 for _, T, _ in track[::20]]
        assert max(reach) < 1.1 * max(reach[0], reach[-1])


def test_a_path_waits_for_a_camera_that_does_not_move():
    servo = ready(LawSettings(path=PathSettings(mode='planned')))
    servo.begin(0)
    lefts = []
    for k in range(500):
        servo.observe(seen(battery.TASKS[3].pose, k * 10 * MS))
        lefts.append(servo.solve(k * 10 * MS).left)
        servo.record(np.zeros(6), k * 10 * MS)
    assert 0.3 < lefts[-1] < 1 and lefts[-1] == pytest.approx(lefts[-2], abs=5e-4)


@pytest.mark.parametrize('choice, degrees, refused', [
    ('goal', 170, True), ('goal', 120, False), ('current', 178, True), ('mean', 178, True),
    ('blend', 178, True), ('mean', 150, False)])
def test_a_roll_that_no_matrix_can_master_is_refused_when_no_path_may_be_planned(
        choice, degrees, refused):
    """BAT-roll170 with goal: the camera would meet the target's plane."""
    start = motion.pose_from_parts(motion.rotation_from_vector([0, 0, np.radians(degrees)]),
                                   (0, 0, 0.5))
    servo = ready(replace(PLAIN, interaction=choice))
    servo.begin(0)
    servo.observe(seen(start))
    solution = servo.solve(0)
    assert bool(solution.refusal) == refused
    if refused:
        assert not solution.twist.any()
        assert 'set law.path.mode to auto or planned' in solution.refusal


def test_a_spurious_equilibrium_shows_as_rest_with_an_error_that_stays():
    """LM-B: what the gate's row `stalled` goes by."""
    def tilted(degrees):
        return motion.pose_from_parts(
            motion.rotation_from_vector(np.radians([degrees, 0, 0])), (0, 0, 1.0))

    goal_xy, goal_depths = pose.image(tilted(30), battery.square())
    servo, T = ready(replace(PLAIN, gain=2.0)), tilted(-30)
    for k in range(400):
        servo.observe(seen(T, k * 25 * MS, goal_xy=goal_xy, goal_depths=goal_depths))
        solution = servo.solve(k * 25 * MS)
        T = motion.exp(-0.025 * solution.twist) @ T
    assert np.linalg.norm(solution.twist) < 1e-6
    assert solution.error_px == pytest.approx(500 * 0.01896708651 / 2, rel=1e-4)


def test_the_gain_grows_towards_the_goal_within_its_bounds():
    settings = LawSettings(gain=1.0, gain_boost=2.0, gain_knee=20.0)
    errors = np.linspace(0, 500, 2001)
    gains = np.array([law_gain(error, settings) for error in errors])
    assert gains[0] == 2.0 and law_gain(20.0, settings) == 1.5
    assert np.all(np.diff(gains) < 0) and np.all((gains > 1.0) & (gains <= 2.0))
    steepest = replace(settings, gain_boost=9.0)
    pull = np.array([error * law_gain(error, steepest) for error in errors])
    assert np.all(np.diff(pull) > -1e-12)


def law_gain(error_px, settings):
    from servo_nodes.control.schedule import gain_at
    return gain_at(error_px, settings)


def test_before_the_loop_is_begun_every_view_is_judged_as_a_start():
    """A marker's corners rolled by 90 degrees: the mean matrix lacks rank, the view does not."""
    turned = motion.pose_from_parts(motion.rotation_from_vector([0, 0, np.pi / 2]), (0, 0, 0.5))
    settings = LawSettings(weights=WeightSettings(estimator='none'))
    servo = ready(settings)
    servo.observe(seen(turned))
    assert servo.solve(0).condition < 100 and not servo.solve(0).refusal
    servo.begin(0)
    led = servo.solve(0)
    assert led.condition < 100 and led.left == 1.0
    direct = ready(replace(settings, path=PathSettings(mode='direct')))
    direct.begin(0)
    direct.observe(seen(turned))
    assert direct.solve(0).condition > 1e5
    far = motion.pose_from_parts(motion.rotation_from_vector([0, 0, 3.1]), (0, 0, 0.5))
    direct.rest()
    direct.observe(seen(far))
    assert 'expected a roll of at most 172' in direct.solve(0).refusal
    direct.observe(seen(battery.home()))
    assert not direct.solve(0).refusal


def test_reset_forgets_the_view_and_keeps_the_camera():
    servo = ready()
    servo.observe(seen(battery.home()))
    servo.reset()
    assert servo.solve(0) is None
    servo.observe(seen(battery.home()))
    assert servo.solve(0) is not None


def test_ten_thousand_ticks_leave_no_memory_behind():
    servo = ready(LawSettings())
    views = [seen(battery.TASKS[3].pose, 0, plate()) for _ in range(2)]

    def tick(first, last):
        for k in range(first, last):
            if k % 3 == 0:
                servo.observe(replace(views[0], stamp=k * 10 * MS))
            solution = servo.solve(k * 10 * MS)
            servo.record(1e-3 * solution.twist, k * 10 * MS)

    tick(0, 2100)
    tracemalloc.start()
    before = tracemalloc.get_traced_memory()[0]
    tick(2100, 2100 + 2 * prediction.HISTORY)
    grown = tracemalloc.get_traced_memory()[0] - before
    tick(2100 + 2 * prediction.HISTORY, 2100 + 8 * prediction.HISTORY)
    final = tracemalloc.get_traced_memory()[0] - before
    tracemalloc.stop()
    assert final < grown + 64_000
