# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The motion that is left, judged by the goal: true to first order, robust, blind to the law."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.control.home import motion_left
from servo_nodes.control.settings import ControllerSettings
from tests.control.views import START, settings, view

PLAIN = ControllerSettings()
SMALL = st.tuples(*[st.floats(-1e-3, 1e-3)] * 6)


def seen_from(away, count=30, seed=4, **changes):
    """Return a view of a tilted plate by a camera that is `away` (6,) from the goal, by OpenCV."""
    rng = np.random.default_rng(seed)
    points = np.c_[rng.uniform(-0.15, 0.15, (count, 2)), np.zeros(count)]
    points[:, 2] = 0.42 + 0.3 * points[:, 0]
    inverse = np.linalg.inv(motion.exp(np.array(away)))
    turn = cv2.Rodrigues(inverse[:3, :3])[0]
    uv = cv2.projectPoints(points, turn, inverse[:3, 3], np.eye(3), None)[0].reshape(-1, 2)
    return view(START, points_xy=uv, goal_xy=points[:, :2] / points[:, 2:], count=count,
                depths=np.full(count, np.nan), goal_depths=points[:, 2], **changes)


@given(SMALL)
def test_it_is_the_way_back_to_first_order(away):
    np.testing.assert_allclose(motion_left(seen_from(away), PLAIN), -np.array(away), atol=2e-5)


def test_wild_points_and_points_without_weight_do_not_count():
    away = (5e-4, -3e-4, 2e-4, 1e-3, -5e-4, 2e-3)
    clean = seen_from(away)
    points = np.array(clean.points_xy)
    points[:3] += 0.2
    weights = np.ones(30)
    points[3:6] += 0.004
    weights[3:6] = 0.0
    wild = seen_from(away, weights=weights)
    object.__setattr__(wild, 'points_xy', points)
    np.testing.assert_allclose(motion_left(wild, PLAIN), -np.array(away), atol=2e-5)


def test_unknown_goal_depths_are_those_of_the_law_s_fallback():
    plain = seen_from((1e-3, 0, 0, 0, 0, 0))
    known = np.full(30, 0.42)
    object.__setattr__(plain, 'goal_depths', known)
    want = motion_left(plain, PLAIN)
    object.__setattr__(plain, 'goal_depths', np.full(30, np.nan))
    got = motion_left(plain, settings(law__depth__fallback=0.42))
    np.testing.assert_allclose(got, want, atol=1e-12)
    assert motion_left(plain, settings(law__depth__fallback=0.84))[0] == pytest.approx(2 * want[0])


def test_an_axis_that_may_not_move_has_nothing_left_to_do():
    left = motion_left(seen_from((1e-3,) * 6), settings(caps__axes=(1, 1, 1, 0, 0, 1)))
    assert left[3] == left[4] == 0.0 and abs(left[0]) > 5e-4


def test_exactly_home_nothing_is_left_and_four_points_on_a_line_are_no_error():
    assert motion_left(seen_from((0,) * 6), PLAIN) == pytest.approx([0.0] * 6, abs=1e-9)
    line = np.c_[np.linspace(-0.2, 0.2, 12), np.zeros(12)]
    assert np.isfinite(motion_left(view(START, goal_xy=line, points_xy=line + 1e-4), PLAIN)).all()
