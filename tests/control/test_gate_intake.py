# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Intake: which views may move the camera, and for which reason the others are dropped."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.camera import Camera
from servo_nodes.control.watch import INBOX, Intake, age
from servo_nodes.values import Reason, View
from tests.control.views import CAMERA, MS, START, settings, view


def intake(**values):
    desk = Intake(settings(**values).watchdog)
    desk.camera = CAMERA
    return desk


def judged(desk, *stamps_and_receipts, **changes):
    """Post views and return those that pass."""
    for stamp, received in stamps_and_receipts:
        desk.post(view(stamp, **changes), received)
    return list(desk.judged(START + 10_000 * MS))


def test_age_is_seconds_and_infinite_without_a_then_or_a_now():
    assert age(START, START + 250 * MS) == 0.25
    assert age(START + 1, START) == -1e-9
    assert age(None, START) == age(START, None) == math.inf


def test_a_good_view_passes_untouched_and_is_counted():
    desk = intake()
    desk.post(whole := view(START - MS), START)
    assert next(desk.judged(START)) is whole
    desk = intake()
    first, second = judged(desk, (START, START + 9 * MS), (START + MS, START + 11 * MS))
    assert (first.stamp, second.stamp) == (START, START + MS)
    assert (desk.heard, desk.good, desk.image) == (
        START + 11 * MS, START + 11 * MS, START + MS)
    assert desk.good_in_a_row == 2 and desk.bad is Reason.NONE and not desk.counts
    assert desk.dropped == 0


@pytest.mark.parametrize(('changes', 'reason', 'words'), [
    ({'count': 3}, Reason.TOO_FEW_POINTS, 'expected at least 4 points, got 3'),
    ({'count': 0}, Reason.TOO_FEW_POINTS, 'expected at least 4 points, got 0'),
    ({'weights': np.r_[np.zeros(9), np.ones(3)]}, Reason.TOO_FEW_POINTS, 'got 3'),
    ({'points_xy': np.full((12, 2), np.nan)}, Reason.NOT_FINITE, 'expected coordinates within'),
    ({'points_xy': np.r_[np.ones((11, 2)), [[0.0, np.inf]]]}, Reason.NOT_FINITE, 'got others'),
    ({'points_xy': np.full((12, 2), 101.0)}, Reason.NOT_FINITE, '+-100'),
    ({'goal_xy': np.r_[np.ones((11, 2)), [[np.nan, 0.0]]]}, Reason.NOT_FINITE, 'got others'),
    ({'goal_xy': np.full((12, 2), -np.inf)}, Reason.NOT_FINITE, 'got others'),
    ({'goal_xy': np.full((12, 2), np.nan)}, Reason.NO_GOAL,
     'expected goal coordinates, got 12 without'),
    ({'weights': np.full(12, np.nan)}, Reason.NOT_FINITE, 'weights from 0 to 1'),
    ({'weights': np.full(12, 1.001)}, Reason.NOT_FINITE, 'weights from 0 to 1'),
    ({'weights': np.full(12, -0.001)}, Reason.NOT_FINITE, 'weights from 0 to 1'),
    ({'depths': np.full(12, np.inf)}, Reason.NOT_FINITE, 'depths from 0.001 to 10000 m or NaN'),
    ({'depths': np.full(12, 0.0)}, Reason.NOT_FINITE, 'depths from 0.001'),
    ({'goal_depths': np.full(12, -1.0)}, Reason.NOT_FINITE, 'depths from 0.001'),
    ({'frame_id': 'left_optical_frame'}, Reason.CAMERA_MISMATCH,
     "expected the frame 'camera_optical_frame' of camera_info, got 'left_optical_frame'"),
])
def test_a_view_that_may_not_move_the_camera_is_dropped_with_its_sentence(changes, reason, words):
    desk = intake()
    assert judged(desk, (START, START), **changes) == []
    assert desk.bad is reason and words in desk.bad_text
    assert desk.bad_in_a_row == 1 and desk.good_in_a_row == 0
    assert desk.counts == {reason: 1} and desk.dropped == 1
    assert desk.heard == START and desk.good is None


def test_depths_may_be_unknown_and_points_without_weight_are_allowed():
    assert judged(intake(), (START, START), depths=np.full(12, np.nan),
                  goal_depths=np.full(12, np.nan), weights=np.r_[np.zeros(8), np.ones(4)])


def test_without_a_calibration_any_frame_passes_because_another_row_stops_the_loop():
    desk = intake()
    desk.camera = None
    assert judged(desk, (START, START), frame_id='anything')
    assert desk.crowded == 0.0


def test_a_stamp_from_the_future_is_dropped_beyond_the_tolerance_and_clipped_below_it():
    desk = intake()
    assert judged(desk, (START + 51 * MS, START)) == []
    assert desk.bad is Reason.STAMP_FUTURE
    assert 'at most 0.05 s ahead of the clock, got 0.051 s' in desk.bad_text
    assert judged(desk, (START + 49 * MS, START))[0].stamp == START


def test_equal_stamps_are_the_same_image_and_earlier_ones_go_backward():
    desk = intake()
    assert judged(desk, (START, START))
    assert judged(desk, (START, START + 30 * MS)) == []
    assert desk.bad is Reason.IMAGE_SILENT and 'got the same one again' in desk.bad_text
    assert judged(desk, (START - MS, START + 40 * MS)) == []
    assert desk.bad is Reason.STAMP_BACKWARD and 'got one 0.001 s before it' in desk.bad_text
    assert desk.bad_in_a_row == 2
    assert judged(desk, (START + MS, START + 50 * MS))
    assert desk.bad_in_a_row == 0 and desk.bad_text == ''


def test_two_stamps_ahead_of_the_clock_do_not_become_two_images_at_once():
    desk = intake()
    assert len(judged(desk, (START + 5 * MS, START), (START + 9 * MS, START))) == 1
    assert desk.bad is Reason.IMAGE_SILENT


def test_an_image_too_old_at_receipt_is_dropped():
    desk = intake()
    assert judged(desk, (START, START + 250 * MS))
    assert judged(desk, (START + MS, START + 252 * MS)) == []
    assert desk.bad is Reason.FEATURES_STALE
    assert 'at most 0.25 s old, got 0.251 s' in desk.bad_text


def test_a_missing_stamp_becomes_the_time_of_receipt_and_is_counted_or_is_dropped_if_asked():
    desk = intake()
    assert judged(desk, (0, START))[0].stamp == START
    assert desk.counts == {Reason.STAMP_ZERO: 1} and desk.dropped == 0
    strict = intake(watchdog__zero_stamp='reject')
    assert judged(strict, (0, START)) == []
    assert strict.bad is Reason.STAMP_ZERO and 'expected a stamp, got zero' in strict.bad_text


def test_a_receipt_later_than_the_decision_counts_as_now_and_none_counts_as_now():
    for received in (START + 99 * MS, None):
        desk = intake()
        desk.post(view(START), received)
        assert len(list(desk.judged(START + 5 * MS))) == 1
        assert desk.heard == desk.good == START + 5 * MS


def test_the_newest_time_that_came_with_a_view_is_known_before_it_is_judged():
    desk = intake()
    assert desk.told is None
    desk.post(view(START), None)
    assert desk.told == START
    desk.post(view(START), START + 5 * MS)
    desk.post(view(START), START + 2 * MS)
    desk.post(view(START + 90 * MS), None)
    assert desk.told == START + 5 * MS


def test_messages_are_judged_in_the_order_they_came_and_a_flood_keeps_the_newest():
    desk = intake()
    desk.post_fault(Reason.NOT_FINITE, 'features: expected a field x, got none')
    desk.post(view(START), START)
    assert len(list(desk.judged(START))) == 1 and desk.good_in_a_row == 1
    assert desk.counts == {Reason.NOT_FINITE: 1}
    for k in range(INBOX + 10):
        desk.post(view(START + (k + 1) * MS), START + (k + 1) * MS)
    passed = list(desk.judged(START + 1000 * MS))
    assert len(passed) == INBOX and passed[-1].stamp == START + (INBOX + 10) * MS


def test_forgetting_accepts_a_new_time_line_and_keeps_the_counts():
    desk = intake()
    judged(desk, (START + 500 * MS, START + 500 * MS), (START + 400 * MS, START + 510 * MS))
    desk.post(view(START), START)
    desk.forget()
    assert (desk.heard, desk.good, desk.image, desk.told) == (None,) * 4
    assert desk.bad is Reason.NONE and desk.bad_in_a_row == desk.good_in_a_row == 0
    assert list(desk.judged(START)) == [] and desk.counts == {Reason.STAMP_BACKWARD: 1}
    assert judged(desk, (START, START))


def frozen_for(desk, milliseconds, *, twist, still):
    """Feed the same points (or moving ones) under new stamps while a twist is sent."""
    for k in range(0, milliseconds + 1, 30):
        stamp = START + k * MS
        points = np.full((12, 2), 0.1) + np.arange(24).reshape(12, 2) * 1e-3
        desk.post(view(stamp, points_xy=points + (0.0 if still else k * 1e-5)), stamp)
        list(desk.judged(stamp))
        desk.moved(twist, 0.03)


def test_a_frozen_picture_under_new_stamps_is_noticed_when_the_camera_is_moved():
    desk = intake()
    frozen_for(desk, 240, twist=(0.0, 0.02, 0, 0, 0, 0), still=True)
    assert desk.bad is Reason.NONE
    frozen_for(intake_ := intake(), 300, twist=(0.0, -0.02, 0, 0, 0, 0), still=True)
    assert intake_.bad is Reason.IMAGE_SILENT
    assert 'move with the camera within 0.25 s, got the same ones for 0.' in intake_.bad_text


@pytest.mark.parametrize(('twist', 'still'), [((0.0,) * 6, True), ((0.02,) * 6, False),
                                              ((0.003, 0, 0, 0, 0, 0), True)])
def test_no_picture_is_called_frozen_at_rest_or_while_its_points_move(twist, still):
    desk = intake()
    frozen_for(desk, 300, twist=twist, still=still)
    assert desk.bad is Reason.NONE


def test_points_along_the_border_and_beyond_are_counted_as_crowding():
    desk = intake()
    inner = np.zeros((6, 2))
    left = np.full((2, 2), (-319.5 / 600, 0.0))
    bottom = np.full((1, 2), (0.0, 230.0 / 600))
    outside = np.full((3, 2), (0.9, 0.0))
    assert judged(desk, (START, START), points_xy=np.r_[inner, left, bottom, outside])
    assert desk.crowded == pytest.approx(0.5)


@pytest.mark.parametrize(('uv', 'inside'), [
    ((19.2, 19.2), True), ((19.1, 100.0), False), ((100.0, 19.1), False),
    ((639 - 19.2, 479 - 19.2), True), ((619.9, 100.0), False), ((100.0, 459.9), False)])
def test_the_band_is_a_share_of_the_smaller_side_on_all_four_sides(uv, inside):
    desk = intake()
    points = np.repeat((np.array([uv]) - (319.5, 239.5)) / 600.0, 12, axis=0)
    points += 1e-9 * np.sign(points) * (-1 if inside else 1)
    judged(desk, (START, START), points_xy=points)
    assert desk.crowded == (0.0 if inside else 1.0)


def test_the_smaller_side_of_an_upright_image_is_its_width():
    desk = intake()
    desk.camera = Camera(480, 640, 600.0, 600.0, 239.5, 319.5)
    judged(desk, (START, START), points_xy=np.full((12, 2), ((22.0 - 239.5) / 600.0, 0.0)))
    assert desk.crowded == 0.0


def test_the_lens_is_taken_into_account():
    desk = intake()
    points = np.full((12, 2), (0.52, 0.0))
    judged(desk, (START, START), points_xy=points)
    assert desk.crowded == 1.0
    desk = intake()
    desk.camera = Camera(640, 480, 600.0, 600.0, 319.5, 239.5, 'plumb_bob', (-0.3, 0.1, 0, 0))
    judged(desk, (START, START), points_xy=points)
    assert desk.crowded == 0.0


ANY = st.floats(allow_nan=True, allow_infinity=True)


@given(st.lists(st.tuples(ANY, ANY, ANY, ANY, ANY, ANY, ANY), max_size=8),
       st.integers(-2 ** 62, 2 ** 62), st.integers(-2 ** 62, 2 ** 62))
def test_whatever_numbers_and_stamps_a_view_holds_what_passes_is_fit_to_move_the_camera(
        rows, stamp, received):
    desk = intake()
    parts = np.array(rows, dtype=float).reshape(-1, 7)
    desk.post(View(stamp, CAMERA.frame_id, parts[:, :2], parts[:, 2:4], parts[:, 4], parts[:, 5],
                   parts[:, 6], np.arange(len(parts))), received)
    for good in desk.judged(received):
        assert len(good) >= 4
        assert np.isfinite(good.points_xy).all() and np.isfinite(good.goal_xy).all()
        assert ((good.weights >= 0) & (good.weights <= 1)).all()
        assert 0 <= received - good.stamp <= 250 * MS
    assert (desk.bad is Reason.NONE) == (desk.good is not None)
