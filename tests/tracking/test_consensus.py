# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The rule of acceptance: its arithmetic against exact sums, and against chance itself."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from servo_nodes.tracking import consensus


@pytest.mark.parametrize(('expected', 'verified'), [(120, 16), (100, 30), (60, 60), (40, 12)])
def test_the_bound_on_chance_is_above_the_exact_tail_and_near_it(expected: int,
                                                                 verified: int) -> None:
    exact = stats.binom.logsf(verified - 1, expected, consensus.BY_CHANCE) / math.log(10)
    bound = consensus.log10_chance(expected, verified)
    assert exact - 1e-9 <= bound <= exact + 1.5


def test_no_more_than_chance_gives_is_no_evidence() -> None:
    assert consensus.log10_chance(100, 3) == 0.0
    assert consensus.log10_chance(0, 0) == 0.0
    assert consensus.log10_chance(10, 0) == 0.0


def test_alarms_follow_their_formula() -> None:
    alpha = math.pi * 9 / 307200
    by_hand = math.log10(96 * math.comb(100, 10) * math.comb(10, 4)) + 6 * math.log10(alpha)
    assert consensus.log10_alarms(100, 10, 3.0, 307200) == pytest.approx(by_hand, abs=1e-9)
    assert consensus.log10_alarms(100, 4, 3.0, 307200) == math.inf
    assert consensus.log10_alarms(4, 4, 3.0, 307200) == math.inf


def test_random_pairs_agree_no_more_than_the_rule_calls_chance() -> None:
    rng = np.random.default_rng(0)
    for _ in range(40):
        first, second = rng.uniform(-0.5, 0.5, (2, 80, 2)) * (1.23, 0.93)
        plane = consensus.plane_through(first, second, 3 / 520)
        if plane is not None:
            agreeing = int(plane[1].sum())
            alarms = consensus.log10_alarms(80, agreeing, 3.0, 307200)
            assert alarms > consensus.LOG10_ONCE_IN


def test_a_plane_is_found_among_many_wrong_pairs() -> None:
    rng = np.random.default_rng(1)
    matrix = np.array([[0.9, -0.2, 0.05], [0.25, 1.1, -0.03], [0.1, -0.05, 1.0]])
    first = rng.uniform(-0.4, 0.4, (100, 2))
    rays = np.concatenate([first, np.ones((100, 1))], axis=1) @ matrix.T
    second = rays[:, :2] / rays[:, 2:]
    second[:60] = rng.uniform(-0.4, 0.4, (60, 2))
    plane = consensus.plane_through(first, second, 3 / 520)
    assert plane is not None
    assert plane[1][60:].all()
    assert np.abs(plane[0] / plane[0][2, 2] - matrix).max() < 1e-3
    assert consensus.log10_alarms(100, int(plane[1].sum()), 3.0, 307200) < -20


def test_spread_is_the_narrow_standard_deviation() -> None:
    turn = np.array([[0.6, -0.8], [0.8, 0.6]])
    points = np.random.default_rng(2).normal(0, (100, 5), (4000, 2)) @ turn.T
    assert consensus.spread_px(points) == pytest.approx(5, rel=0.05)
    assert consensus.spread_px(np.arange(10)[:, None] * np.array([1.0, 2.0])) < 1e-5
    assert consensus.spread_px(points[:2]) == 0.0


def test_three_points_make_no_plane() -> None:
    assert consensus.plane_through(np.zeros((3, 2)), np.zeros((3, 2)), 0.01) is None
