# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Progress: growing, stalling and settling errors, and the leash."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.control.progress import Growth, Progress, Settling, Stall
from servo_nodes.control.travel import Leash
from tests.control.views import START, TICK, settings

WATCHDOG = settings().watchdog
SETTLE = settings().settle


def grown(error_of_time, seconds=6.0, window=1.6):
    """Return the largest ratio and when it first came."""
    growth, best, first = Growth(), 1.0, math.inf
    for k in range(int(seconds * 100)):
        growth.add(error_of_time(k / 100), START + k * TICK, window)
        if growth.ratio >= 1.5 and math.isinf(first):
            first = k / 100
        best = max(best, growth.ratio)
    return best, first


def test_an_error_that_grows_exponentially_is_found_within_the_window_and_one_part():
    best, first = grown(lambda t: 20 * math.exp(0.5 * t))
    assert best >= 1.5 and first <= 2.01


def test_a_growing_swing_is_found_although_its_error_falls_again_and_again():
    best, _ = grown(lambda t: abs(5 * math.exp(0.6 * t) * math.cos(2 * math.pi * 3 * t)))
    assert best >= 1.5


@pytest.mark.parametrize('error_of_time', [
    lambda t: 100 * math.exp(-t),
    lambda t: 30.0,
    lambda t: 30 + 10 * math.sin(2 * math.pi * t / 0.3),
    lambda t: 1.0 if t < 2 else 60 * math.exp(-(t - 2)),
    lambda t: 0.2 + 0.3 * t,
    lambda t: 100 * math.exp(-t) + 30 * math.exp(-3 * t) * math.sin(9 * t),
], ids=['decay', 'constant', 'swing', 'nudge', 'below noise', 'overshoot'])
def test_an_error_that_does_not_diverge_is_left_alone(error_of_time):
    assert grown(error_of_time)[0] < 1.5


def test_growth_below_the_noise_of_two_pixels_does_not_count():
    assert grown(lambda t: 0.1 * math.exp(0.8 * min(t, 3.0)), seconds=3.0)[0] == 1.0


def test_a_new_start_forgets_the_growth():
    growth = Growth()
    for k in range(400):
        growth.add(5 * math.exp(k / 100), START + k * TICK, 1.6)
    assert growth.ratio > 1.5
    growth.restart()
    assert growth.ratio == 1.0
    growth.add(50.0, START, 1.6)
    assert growth.ratio == 1.0


def test_stalling_is_the_time_since_the_error_last_fell_by_the_asked_share():
    stall = Stall()
    for k in range(300):
        stall.add(50.0 * (0.97 ** min(k, 100)), START + k * TICK, WATCHDOG, 1.0)
    assert stall.seconds == pytest.approx(2.0, abs=0.03)
    stall.restart()
    assert stall.seconds == 0.0


def test_progress_too_small_for_the_asked_share_does_not_count():
    stall = Stall()
    for k in range(501):
        stall.add(50.0 - 0.004 * k, START + k * TICK, WATCHDOG, 1.0)
    assert stall.seconds == pytest.approx(5.0)


def test_below_the_tolerance_there_is_no_progress_to_be_made():
    stall = Stall()
    for k in range(1000):
        stall.add(0.999, START + k * TICK, WATCHDOG, 1.0)
    assert stall.seconds == 0.0


def test_an_error_that_is_not_a_number_is_no_progress():
    stall = Stall()
    stall.add(50.0, START, WATCHDOG, 1.0)
    for k in range(600):
        stall.add(math.nan, START + k * TICK, WATCHDOG, 1.0)
    assert stall.seconds > 5.0


def settled(motion_left, error_px=0.3, ticks=100, settling=None, start=START, **noise):
    settling = settling or Settling()
    for k in range(ticks):
        settling.add(motion_left, error_px, start + k * TICK, SETTLE, **noise)
        if settling.is_home:
            return k * TICK / 1e9
    return math.inf


def test_home_takes_its_duration_with_everything_small():
    assert settled((1e-4, 1e-4, 0, 0, 4e-4, 0)) == pytest.approx(0.5)


@pytest.mark.parametrize(('motion_left', 'error_px'), [
    ((1.5e-4, 1.5e-4, 0, 0, 0, 0), 0.3), ((0, 0, -2.1e-4, 0, 0, 0), 0.3),
    ((0, 0, 0, 4e-4, 4e-4, 0), 0.3), ((0, 0, 0, 0, 0, -6e-4), 0.3), ((0,) * 6, 1.01),
    ((math.nan, 0, 0, 0, 0, 0), 0.3), ((0,) * 6, math.nan)])
def test_home_is_not_said_while_anything_is_too_large_or_no_number(motion_left, error_px):
    assert settled(motion_left, error_px) == math.inf


def test_noise_about_zero_is_averaged_and_not_taken_for_motion():
    rng = np.random.default_rng(3)
    settling = Settling()
    for k in range(300):
        settling.add(rng.normal(scale=1.5e-4, size=6), 0.3, START + k * TICK, SETTLE)
    assert settling.is_home


def test_where_the_view_tells_less_what_it_tells_is_enough():
    rough = (1e-3, 0, 0, 0, 0, 2e-3)
    assert settled(rough) == math.inf
    assert settled(rough, linear_noise=1.1e-3, angular_noise=2.1e-3) == pytest.approx(0.5)
    assert settled(rough, linear_noise=1.1e-3, angular_noise=1.9e-3) == math.inf
    assert settled(rough, linear_noise=math.nan, angular_noise=math.nan) == math.inf


def test_home_is_left_only_beyond_the_hysteresis_and_the_wait_starts_anew():
    settling = Settling()
    assert settled((0,) * 6, settling=settling) == pytest.approx(0.5)
    now = START + 100 * TICK
    for k in range(100):
        settling.add((5e-4, 0, 0, 0, 0, 0), 2.9, now + k * TICK, SETTLE)
        assert settling.is_home
    now += 100 * TICK
    for k in range(100):
        settling.add((7e-4, 0, 0, 0, 0, 0), 2.9, now + k * TICK, SETTLE)
    assert not settling.is_home
    assert settled((0,) * 6, ticks=300, settling=settling, start=now + 100 * TICK) > 0.5


def test_a_short_spell_inside_the_tolerance_is_not_home():
    settling = Settling()
    for k in range(400):
        settling.add((0,) * 6, 0.3 if k % 40 < 30 else 30.0, START + k * TICK, SETTLE)
        assert not settling.is_home


def test_time_that_runs_back_starts_the_average_anew():
    settling = Settling()
    settling.add((1.0,) * 6, 50.0, START + 500 * TICK, SETTLE)
    assert settled((0,) * 6, settling=settling) == pytest.approx(0.5)


def spent():
    progress = Progress()
    progress.growth.ratio, progress.stall.seconds, progress.settling.is_home = 2.0, 9.0, True
    progress.leash.add((0.1, 0, 0, 0, 0, 0), 1.0)
    return progress


def test_a_start_from_rest_judges_anew_but_only_a_new_engagement_ties_the_leash_anew():
    progress = spent()
    progress.begin()
    assert (progress.growth.ratio, progress.stall.seconds, progress.settling.is_home) == (
        1.0, 0.0, False)
    assert progress.leash.travelled == pytest.approx(0.1)
    progress = spent()
    progress.restart()
    assert (progress.growth.ratio, progress.stall.seconds, progress.settling.is_home) == (
        1.0, 0.0, False)
    assert progress.leash.travelled == 0.0


TWISTS = st.lists(st.tuples(*[st.floats(-0.5, 0.5)] * 6), min_size=1, max_size=60)


@given(TWISTS)
def test_the_leash_measures_the_way_of_the_exact_motion(twists):
    leash, pose, turn = Leash(), np.eye(4), np.zeros(3)
    for twist in twists:
        leash.add(twist, 0.01)
        pose = pose @ motion.exp(np.array(twist) * 0.01)
        turn += 0.01 * np.array(twist[3:])
    way = float(np.linalg.norm(pose[:3, 3]))
    assert way - 1e-3 <= leash.travelled <= way + 0.02
    assert leash.turned == pytest.approx(np.linalg.norm(turn), abs=1e-12)


def test_the_leash_is_the_distance_from_the_start_and_not_the_way_walked():
    # SE-I of the check values: a circle of radius 0.2, after 2 s at (0.168, 0.092).
    leash = Leash()
    for _ in range(200):
        leash.add((0.1, 0, 0, 0, 0, 0.5), 0.01)
    assert leash.travelled == pytest.approx(math.hypot(0.168294197, 0.09193953883), abs=5e-3)
    assert leash.turned == pytest.approx(1.0)
    for _ in range(2513 - 200):
        leash.add((0.1, 0, 0, 0, 0, 0.5), 0.01)
    assert leash.travelled < 0.02
    assert leash.turned == pytest.approx(4 * math.pi, rel=1e-3)
    leash.restart()
    assert leash.travelled == leash.turned == 0.0


def test_noise_at_the_goal_does_not_use_up_the_leash():
    rng = np.random.default_rng(1)
    leash, last = Leash(), np.zeros(6)
    for _ in range(20_000):
        state = rng.normal(scale=1e-3, size=6)
        leash.add(list((state - last) / 0.01), 0.01)
        last = state
    assert leash.travelled < 0.02 and leash.turned < 0.02
