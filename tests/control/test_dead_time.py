# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What dead time, delay, noise and a cap on speed do to the loop, with the law and exact motion.

A square is off sideways, parallel to the image: the law's error is then one number, so that the
loop is the integrator with gain and delay whose figures are in closed form (Lambert W for pure
dead time, the method of steps for what follows; the characteristic roots of x+ = x - g x_d for
whole samples, Levin & May 1976, from memory). Many loops run side by side through `law.twists`;
prediction is off but where a test says so.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import scipy.special

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control import caps, law, pose
from servo_nodes.control.law_settings import (
    DampingSettings,
    LawSettings,
    PathSettings,
    PredictionSettings,
    WeightSettings,
)
from servo_nodes.control.servo import Servo
from servo_nodes.offline import battery
from servo_nodes.values import SECOND_NS, View

BARE = LawSettings(damping=DampingSettings(below=0.0))
CAMERA = Camera(640, 480, 500.0, 500.0, 320.0, 240.0)
AWAY, STEP = 0.05, 0.1
TICK = round(STEP * SECOND_NS)
LARGEST = {d: 2 * np.sin(np.pi / (2 * (2 * d + 1))) for d in range(6)}
CALM = {d: d ** d / (d + 1) ** (d + 1) for d in range(6)}


def asked(poses, gains):
    """Return the twists (B, 6) of the law for poses (B, 4, 4) and gains (B,)."""
    xy, depths = pose.image(poses, battery.square())
    goal_xy, goal_depths = pose.image(battery.home(), battery.square())
    return law.twists(xy, goal_xy, depths, goal_depths, BARE, gain=gains)


def sideways(gains, delays, samples, late=0.0):
    """Return errors (samples + 1, B) as shares of the start, from rest, with a sample of 1 s.

    Each twist waits `delays` (B,) whole samples, then the share `late` of one, and holds a sample.
    """
    gains, delays = np.asarray(gains, dtype=float), np.asarray(delays)
    count = len(gains)
    poses = np.tile(motion.pose_from_parts(np.eye(3), (AWAY, 0, 0.5)), (count, 1, 1))
    sent = np.zeros((delays.max() + 2, count, 6))
    track, rows = [np.ones(count)], np.arange(count)
    for k in range(samples):
        sent[k % len(sent)] = asked(poses, gains)
        acting = sent[(k - delays) % len(sent), rows]
        if late:
            before = sent[(k - 1 - delays) % len(sent), rows]
            poses = motion.exp(-late * before) @ poses
        poses = motion.exp(-(1 - late) * acting) @ poses
        track.append(poses[:, 0, 3] / AWAY)
    return np.array(track)


def dead(times_gain, per_dead_time, dead_times):
    """Return times in dead times (K,), and errors (K, B), of loops with pure dead time.

    A twist held for a sample is half a sample old on the average, which counts as dead time. Time
    is counted from the first motion on, one dead time after the start.
    """
    gains = np.asarray(times_gain) / (per_dead_time + 0.5)
    samples = round(dead_times * (per_dead_time + 0.5))
    errors = sideways(gains, np.full(len(gains), per_dead_time), samples)
    return (np.arange(samples + 1) - per_dead_time) / (per_dead_time + 0.5), errors


def settled_at(times, errors, band=0.02):
    """Return the time after which errors (K,) never leave the band again, interpolated."""
    last = int(np.flatnonzero(np.abs(errors) > band)[-1])
    edge = np.copysign(band, errors[last])
    part = (errors[last] - edge) / (errors[last] - errors[last + 1])
    return times[last] + part * (times[last + 1] - times[last])


def growth(errors, period):
    """Return by what an oscillation (K, B) of about `period` samples grows in ten periods."""
    late, early = (np.abs(errors[end - 2 * period:end]).max(axis=0)
                   for end in (len(errors), len(errors) - 10 * period))
    return late / early


TABLE = {0.1: (0, 3.504154), 0.2: (0, 3.050369), 0.367879: (0, 2.03496),
         0.5: (0.0405196, 2.528224), 0.7854: (0.2873873, 6.252844), 1.0: (0.5, 11.89317)}


def test_dead_time_overshoots_and_settles_as_published():
    """4.2: overshoot, and the time after which 2 % are never left again, in 1 / gain."""
    products = np.array(list(TABLE))
    times, errors = dead(products, 60, 40)
    for product, x, (overshoot, settled) in zip(products, errors.T, TABLE.values(), strict=True):
        assert max(0.0, -x.min()) == pytest.approx(overshoot, abs=1e-4), product
        assert product * settled_at(times, x) == pytest.approx(settled, rel=3e-4), product


def test_the_dominant_pole_is_lamberts():
    """s = W(-gain * dead time) / dead time, with SciPy's W: how fast the slowest part decays."""
    products = np.array([0.1, 0.2])
    times, errors = dead(products, 30, 60)
    for product, x in zip(products, errors.T, strict=True):
        a, b = (int(np.searchsorted(times, t)) for t in (20.0, 50.0))
        rate = np.log(x[b] / x[a]) / (times[b] - times[a])
        assert rate == pytest.approx(scipy.special.lambertw(-product).real, rel=2e-4)


def test_dead_time_overshoots_from_one_e_th_on_and_not_below():
    """A double real pole at gain * dead time = 1 / e."""
    _, errors = dead(np.array([0.9, 0.99, 1.0, 1.05, 1.2]) / np.e, 60, 30)
    lowest = errors.min(axis=0)
    assert (lowest[:3] > -1e-12).all()
    assert (lowest[3:] < -1e-9).all()


def test_dead_time_is_stable_up_to_half_pi():
    """At gain * dead time = pi / 2 the oscillation has a period of four dead times."""
    _, errors = dead(np.array([0.98, 1.0, 1.02]) * np.pi / 2, 20, 100)
    shrunk, kept, grown = growth(errors, 82)
    assert shrunk < 0.8 and grown > 1.2
    assert kept == pytest.approx(1.0, abs=0.01)


def test_whole_samples_of_delay_have_the_published_largest_gain():
    """2 sin(pi / (2 (2 d + 1))): stable just below, unstable just above, ringing at it."""
    assert list(LARGEST.values()) == pytest.approx(
        [2, 1, 0.6180339887, 0.4450418679, 0.3472963553, 0.2846296765], rel=1e-9)
    for d, largest in LARGEST.items():
        period = 2 * (2 * d + 1)
        errors = sideways(np.array([0.99, 1.0, 1.01]) * largest, [d] * 3, 60 * period)
        shrunk, _, grown = growth(errors, period)
        assert shrunk < 0.95 and grown > 1.05, d
        kept = errors[-4 * period:, 1]
        np.testing.assert_allclose(kept[period:], kept[:-period], atol=1e-6)
        assert np.abs(kept[period // 2:] + kept[:-(period // 2)]).max() < 1e-6


def test_whole_samples_of_delay_have_the_published_gain_without_overshoot():
    """d^d / (d + 1)^(d + 1): the error changes its sign just above, never at it or below."""
    assert list(CALM.values()) == pytest.approx(
        [1, 0.25, 0.1481481481, 0.10546875, 0.08192, 0.06697959534], rel=1e-9)
    for d, calm in CALM.items():
        below, above = sideways(np.array([0.99, 1.04]) * calm, [d] * 2, 20 * (d + 1)).min(axis=0)
        assert below > -1e-12, d
        assert above < -1e-9, d


@pytest.mark.parametrize('late, largest', [(0.1, 2.5), (0.2, 2 / 0.6), (0.5, 2), (0.75, 4 / 3)])
def test_a_fraction_of_a_sample_has_the_published_largest_gain(late, largest):
    """2 / (1 - 2 f) below a quarter, 1 / f from there on; below half a sample never under 2."""
    errors = sideways(np.array([0.99, 1.01]) * largest, [0, 0], 200, late=late)
    shrunk, grown = growth(errors, 6)
    assert shrunk < 0.9 and grown > 1.1


def test_a_cap_on_speed_delays_the_approach_as_published():
    """SAT: 0.5 m sideways, gain 0.5, 0.1 m/s: capped for 3 s, within 1 mm after 13.597 s."""
    step, T = 0.008, motion.pose_from_parts(np.eye(3), (0.5, 0, 0.5))
    capped = reached = 0
    while T[0, 3] > 0.001:
        twist = asked(T[None], np.array([0.5]))[0]
        sent = caps.scaled(twist, linear=0.1, angular=0.5)
        capped += bool(np.linalg.norm(sent) < np.linalg.norm(twist) * (1 - 1e-12))
        T = motion.exp(-step * sent) @ T
        reached += 1
    assert capped * step == pytest.approx(3.0, abs=2 * step)
    assert reached * step == pytest.approx(13.59663473, rel=2e-3)


@pytest.mark.parametrize('gain, delay, expected', [
    (0.1, 0, 0.05263157895), (0.1, 1, 0.0582010582), (0.5, 1, 0.6)])
def test_the_loop_passes_on_as_much_noise_as_published(gain, delay, expected):
    """NV: white noise; the sum of squares of what one bad measurement does at home."""
    T, sent, total = battery.home(), [np.zeros(6)] * delay, 0.0
    goal_xy, depths = pose.image(battery.home(), battery.square())
    for k in range(400):
        xy, now = pose.image(T, battery.square())
        noise = np.array([1e-4, 0]) if k == 0 else 0.0
        sent.append(law.twists(xy + noise, goal_xy, now, depths, BARE, gain=gain))
        T = motion.exp(-sent.pop(0)) @ T
        total += (T[0, 3] / (0.5 * 1e-4)) ** 2
    assert total == pytest.approx(expected, rel=1e-7)


def test_the_loop_scatters_as_the_worth_of_the_view_says():
    """PN: 0.5 px on each coordinate of the square's corners, f = 500 px, gain per sample 0.02."""
    impulses = 1e-6 * np.eye(8).reshape(8, 4, 2)
    poses, squares = np.tile(battery.home(), (8, 1, 1)), np.zeros((8, 6))
    goal_xy, depths = pose.image(battery.home(), battery.square())
    for k in range(700):
        xy, now = pose.image(poses, battery.square())
        twists = law.twists(xy + (impulses if k == 0 else 0), goal_xy, now, depths, BARE,
                            gain=0.02)
        poses = motion.exp(-twists) @ poses
        away = motion.log(battery.home() @ motion.inverse(poses))
        squares += away * away
    scatter = 0.5 / 500 * np.sqrt(squares.sum(axis=0)) / 1e-6
    np.testing.assert_allclose(scatter, [0.0006537575926, 0.0006537575926, 0.000088833632,
                                         0.001256297269, 0.001256297269, 0.0001776672636],
                               rtol=1e-5)


def test_a_target_that_drifts_leaves_rate_over_gain():
    """RAMP: 0.01 1/s in the image at gain 0.5: 0.02."""
    T = battery.home()
    drift = motion.exp([0.5 * 0.01 * 0.04, 0, 0, 0, 0, 0])
    for _ in range(600):
        T = drift @ motion.exp(-0.04 * asked(T[None], np.array([0.5]))[0]) @ T
    assert T[0, 3] / T[2, 3] == pytest.approx(0.02, rel=1e-4)


def live(product, delay, samples, predict=False):
    """Return errors (samples + 1,) of the live servo; each twist waits `delay` whole samples."""
    settings = replace(
        BARE, gain=product / STEP, gain_boost=1.0, start_rate=200.0, interaction='current',
        weights=WeightSettings(estimator='none'), path=PathSettings(mode='direct'),
        prediction=PredictionSettings(enabled=predict, delay=STEP * delay))
    servo, T = Servo(settings), motion.pose_from_parts(np.eye(3), (AWAY, 0, 0.5))
    servo.calibrate(CAMERA)
    goal_xy, goal_depths = pose.image(battery.home(), battery.square())
    sent, track = [np.zeros(6)] * delay, [1.0]
    for k in range(samples):
        xy, depths = pose.image(T, battery.square())
        servo.observe(View(k * TICK, 'camera', xy, goal_xy, depths, goal_depths, np.ones(4),
                           np.arange(4)))
        sent.append(servo.solve(k * TICK).twist)
        servo.record(sent[-1], k * TICK)
        T = motion.exp(-STEP * sent.pop(0)) @ T
        track.append(T[0, 3] / AWAY)
    return np.array(track)


@pytest.mark.parametrize('delay', [1, 2, 4])
def test_the_live_servo_has_the_same_limits_and_prediction_lifts_them(delay):
    period = 2 * (2 * delay + 1)
    below, above = (live(share * LARGEST[delay], delay, 24 * period) for share in (0.98, 1.02))
    assert growth(below, period) < 0.9 and growth(above, period) > 1.1
    assert live(0.98 * CALM[delay], delay, 20 * (delay + 1)).min() > 0
    foreseen = live(0.9, delay, 24 * period, predict=True)
    assert foreseen.min() > -0.01
    assert np.abs(foreseen[2 * (delay + 1):]).max() < 0.02
