# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The gate's table, row by row: where each trips, where it does not, what it says and does."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.control.gate import (
    GOOD_VIEWS,
    REFUSING,
    SEVERITY,
    TABLE,
    Reaction,
    slowdown,
    verdict,
)
from servo_nodes.control.situation import Situation
from servo_nodes.values import Reason
from tests.control.views import situation

FAULT, HOLD, STANDBY, SLOW = Reaction.FAULT, Reaction.HOLD, Reaction.STANDBY, Reaction.SLOW
TEXT = 'features: expected 1, got 2'


def bad(reason, in_a_row=1, good_age=0.0):
    return {'bad': reason, 'bad_text': TEXT, 'bad_in_a_row': in_a_row, 'good_age': good_age}


# One line for each row: reason, reaction, situations that trip it alone, the nearest that do not.
ROWS = [
    (Reason.EXCEPTION, FAULT, [{'exception': 'ValueError: x'}], [{'exception': ''}]),
    (Reason.HALTED, FAULT, [{'halted': True}], [{'halted': False}]),
    (Reason.CLOCK_JUMP, STANDBY, [{'jumped': True}], [{'jumped': False}]),
    (Reason.CAMERA_MISMATCH, FAULT,
     [{'camera_changed': 'camera_info: expected a, got b'}, bad(Reason.CAMERA_MISMATCH)],
     [{'camera_changed': ''}]),
    (Reason.NO_CAMERA, FAULT,
     [{'calibrated': False}, {'calibrated': False, 'camera_fault': 'k: expected 9, got 8'}],
     [{'calibrated': True}]),
    (Reason.NO_GOAL, FAULT, [bad(Reason.NO_GOAL)], [{}]),
    (Reason.SECOND_PUBLISHER, FAULT, [{'publishers': 2}],
     [{'publishers': 1}, {'publishers': 0}, {'publishers': 2, 'output__sole_publisher': False}]),
    (Reason.NO_LISTENER, FAULT, [{'listeners': 0}],
     [{'listeners': 1}, {'listeners': 9}, {'listeners': 0, 'output__listener_required': False}]),
    (Reason.TRAVEL_LIMIT, FAULT,
     [{'travelled': 1.0001}, {'turned': 3.5001}, {'travelled': math.nan}, {'turned': math.nan}],
     [{'travelled': 1.0, 'turned': 3.5}, {'travelled': 1.5, 'watchdog__travel': 2.0},
      {'turned': 6.0, 'watchdog__turn': 6.0}]),
    (Reason.DIVERGING, FAULT, [{'grown': 1.5}, {'grown': math.nan}],
     [{'grown': 1.4999}, {'grown': 1.9, 'watchdog__diverging_growth': 2.0}]),
    (Reason.STALLED, FAULT, [{'stalled': 5.001}, {'stalled': math.nan}],
     [{'stalled': 5.0}, {'stalled': 9.0, 'watchdog__stalled_window': 10.0}]),
    (Reason.HEARTBEAT_LOST, HOLD,
     [{'heartbeat__required': True, 'heartbeat_age': age}
      for age in (0.501, math.inf, math.nan, -0.0501)],
     [{'heartbeat_age': math.inf}, {'heartbeat__required': True, 'heartbeat_age': 0.5},
      {'heartbeat__required': True, 'heartbeat_age': -0.05},
      {'heartbeat__required': True, 'heartbeat_age': 0.9, 'heartbeat__timeout': 1.0}]),
    (Reason.NOT_FINITE, HOLD, [{'law_is_finite': False}], [{'law_is_finite': True}]),
    (Reason.NOT_FINITE, HOLD, [bad(Reason.NOT_FINITE), bad(Reason.NOT_FINITE, 1, 9.0)], [{}]),
    (Reason.OVERRUN, HOLD, [{'slept': 0.1201}, {'slept': math.inf}, {'slept': math.nan}],
     [{'slept': 0.12}, {'slept': 0.9, 'watchdog__timeout': 1.0}]),
    (Reason.OVERRUN, HOLD, [{'late_in_a_row': 6, 'late': 0.012}], [{'late_in_a_row': 5}]),
    (Reason.FEATURES_SILENT, HOLD,
     [{'heard_age': age, 'good_age': age} for age in (0.1201, math.inf, math.nan)],
     [{'heard_age': 0.12, 'good_age': 0.12},
      {'heard_age': 0.9, 'good_age': 0.9, 'watchdog__timeout': 1.0}]),
    (Reason.IMAGE_SILENT, HOLD,
     [bad(Reason.IMAGE_SILENT, 1, 0.1201), bad(Reason.IMAGE_SILENT, 1, math.inf),
      bad(Reason.IMAGE_SILENT, 1, math.nan)],
     [bad(Reason.IMAGE_SILENT, 99, 0.12)]),
    (Reason.FEATURES_STALE, HOLD, [bad(Reason.FEATURES_STALE)], [{}]),
    (Reason.STAMP_FUTURE, HOLD, [bad(Reason.STAMP_FUTURE, 3), bad(Reason.STAMP_FUTURE, 1, 0.13)],
     [bad(Reason.STAMP_FUTURE, 2, 0.12)]),
    (Reason.STAMP_BACKWARD, HOLD,
     [bad(Reason.STAMP_BACKWARD, 3), bad(Reason.STAMP_BACKWARD, 1, 0.13)],
     [bad(Reason.STAMP_BACKWARD, 2, 0.12)]),
    (Reason.STAMP_ZERO, HOLD, [bad(Reason.STAMP_ZERO, 3), bad(Reason.STAMP_ZERO, 1, 0.13)],
     [bad(Reason.STAMP_ZERO, 2, 0.12)]),
    (Reason.TOO_FEW_POINTS, HOLD, [bad(Reason.TOO_FEW_POINTS)], [{}]),
    (Reason.FEATURES_STALE, HOLD, [{'image_age': 0.2501}, {'image_age': math.nan}],
     [{'image_age': 0.25}, {'image_age': 0.9, 'watchdog__staleness': 1.0}]),
    (Reason.ILL_CONDITIONED, HOLD,
     [{'condition': 1001.0}, {'condition': math.inf}, {'condition': math.nan},
      {'smallest': 0.9e-3}, {'smallest': math.nan},
      {'refusal': 'start: expected less than half a turn, got more; start nearer'}],
     [{'condition': 1000.0, 'smallest': 1e-3},
      {'condition': 5000.0, 'smallest': 1e-4, 'watchdog__condition': 1e4,
       'watchdog__smallest': 1e-5}]),
    (Reason.LEAVING_VIEW, HOLD, [{'crowded': 0.7001}, {'crowded': math.nan}], [{'crowded': 0.4}]),
    (Reason.LEAVING_VIEW, SLOW, [{'crowded': 0.4001}, {'crowded': 0.7}],
     [{'crowded': 0.4}, {'crowded': 0.6, 'watchdog__crowd_slow': 0.6}]),
]
CASES = [(k, case) for k, row in enumerate(ROWS) for case in row[2]]


def test_the_table_has_exactly_the_rows_of_this_test_in_the_order_of_severity():
    assert [(row.reason, row.reaction) for row in TABLE] == [row[:2] for row in ROWS]


def test_every_reason_but_none_has_a_row():
    assert {row.reason for row in TABLE} == set(Reason) - {Reason.NONE}


@pytest.mark.parametrize(('k', 'case'), CASES)
def test_a_row_trips_on_its_condition_and_is_the_verdict_when_it_is_alone(k, case):
    moment = situation(**case)
    assert TABLE[k].count(moment) >= TABLE[k].trigger
    assert verdict(moment) is TABLE[k]


@pytest.mark.parametrize(('k', 'case'), [(k, case) for k, row in enumerate(ROWS)
                                         for case in row[3]])
def test_a_row_does_not_trip_on_the_allowed_side_of_its_limit(k, case):
    moment = situation(**case)
    assert TABLE[k].count(moment) < TABLE[k].trigger
    assert verdict(moment) is None


def test_nothing_wrong_is_no_verdict():
    assert verdict(situation()) is None


def test_the_order_of_severity_is_total_and_faults_come_before_what_can_be_waited_out():
    assert sorted(SEVERITY.values()) == sorted(set(SEVERITY.values()))
    rank = {FAULT: 0, STANDBY: 0, HOLD: 1, SLOW: 2}
    ranks = [rank[row.reaction] for row in TABLE]
    assert ranks == sorted(ranks)
    always = [row.always for row in TABLE]
    assert always == sorted(always, reverse=True)


@given(st.sets(st.sampled_from(range(len(CASES))), min_size=1, max_size=6))
def test_of_several_rows_that_trip_the_most_severe_gives_its_name(chosen):
    moment, ranks = situation(), []
    for index in sorted(chosen):
        k, case = CASES[index]
        if any('__' in name for name in case):
            continue
        moment = moment._replace(**case)
        ranks.append(k)
    tripped = [k for k, row in enumerate(TABLE) if row.count(moment) >= row.trigger]
    found = verdict(moment)
    assert (found is None) == (not tripped)
    assert found is None or TABLE.index(found) == tripped[0]


@given(good_age=st.floats(0.1201, 1e6), heard_age=st.floats(0, 1e6), count=st.integers(1, 9),
       reason=st.sampled_from([Reason.NOT_FINITE, Reason.IMAGE_SILENT, Reason.FEATURES_STALE,
                               Reason.STAMP_FUTURE, Reason.STAMP_BACKWARD, Reason.STAMP_ZERO,
                               Reason.TOO_FEW_POINTS, Reason.CAMERA_MISMATCH, Reason.NO_GOAL]))
def test_no_good_view_for_the_watchdog_s_time_always_stops_whatever_else_is_heard(
        good_age, heard_age, count, reason):
    moment = situation(**bad(reason, count, good_age), heard_age=min(heard_age, good_age))
    found = verdict(moment)
    assert found is not None and found.reaction in (HOLD, FAULT)


NUMBER = st.floats(allow_nan=True, allow_infinity=True)


@given(st.fixed_dictionaries(dict.fromkeys((
    'travelled', 'turned', 'grown', 'stalled', 'heard_age', 'good_age', 'image_age', 'condition',
    'smallest', 'crowded'), NUMBER)))
def test_whatever_the_numbers_no_verdict_means_that_all_are_on_the_allowed_side(numbers):
    moment = situation(**numbers)
    if verdict(moment) is None:
        limits = moment.watchdog
        assert moment.travelled <= limits.travel and moment.turned <= limits.turn
        assert moment.grown < limits.diverging_growth
        assert moment.stalled <= limits.stalled_window
        assert moment.heard_age <= limits.timeout
        assert moment.image_age <= limits.staleness
        assert moment.condition <= limits.condition and moment.smallest >= limits.smallest
        assert moment.crowded <= limits.crowd_slow
    assert verdict(moment) is verdict(moment._replace())


def test_requests_to_engage_are_refused_by_every_row_that_can_be_wrong_before_the_start():
    later = {Reason.CLOCK_JUMP, Reason.TRAVEL_LIMIT, Reason.DIVERGING, Reason.STALLED}
    assert {row.reason for row in TABLE if not row.refuses} == later | {Reason.LEAVING_VIEW}
    assert {row.reason for row in REFUSING} == set(Reason) - later - {Reason.NONE}


def test_counts_to_trigger_and_to_release_are_those_of_the_design():
    triggers = {row.reason: row.trigger for row in TABLE if row.trigger > 1}
    assert triggers.pop(Reason.IMAGE_SILENT) > 10 ** 6
    assert triggers == {Reason.OVERRUN: 6, Reason.STAMP_FUTURE: 3, Reason.STAMP_BACKWARD: 3,
                        Reason.STAMP_ZERO: 3}
    assert all(row.release == (GOOD_VIEWS if row.reaction is HOLD else 0) for row in TABLE)
    assert GOOD_VIEWS == 3


REMEDY = re.compile(
    r'\b(check|reset|report|engage|release|use|calibrate|teach|stop|start|set|spread|shorten|'
    r'free|bring|let|choose|raise|lower|remap)\b')
YES_OR_NO = {Reason.EXCEPTION, Reason.HALTED, Reason.CLOCK_JUMP}


@pytest.mark.parametrize(('k', 'case'), CASES)
def test_every_sentence_says_value_limit_and_remedy(k, case):
    sentence = TABLE[k].sentence(situation(**case))
    said, remedy = sentence.split('; ', 1)
    assert REMEDY.search(remedy)
    assert re.search(r'\d', said) or 'expected' in said
    limit = ('expected', 'at most', 'at least', 'allowed', 'full speed up to')
    assert any(word in said for word in limit)
    assert 'got' in said or re.search(r'\d', said) or TABLE[k].reason in YES_OR_NO
    assert '\n' not in sentence and not sentence.endswith('.')


def test_the_sentences_carry_the_numbers_of_the_moment():
    def said(**case):
        moment = situation(**case)
        return verdict(moment).sentence(moment)

    assert said(heard_age=0.345).startswith('no features for 0.345 s, at most 0.12 s allowed')
    assert said(heard_age=math.inf).startswith('no features so far, at most 0.12 s allowed')
    assert said(travelled=1.25, turned=0.5).startswith(
        'moved 1.250 m and 0.50 rad since it was engaged, at most 1 m and 3.5 rad allowed')
    assert said(grown=2.5, error_px=80.0).startswith(
        'the error grew to 80.0 px, 2.50 times within 1.6 s, less than 1.5 times allowed')
    assert said(stalled=6.0, error_px=12.5).startswith(
        'the error of 12.5 px made no progress for 6.0 s, at most 5 s allowed')
    assert said(publishers=3).startswith('3 publishers of the command, at most 1 allowed')
    assert said(listeners=0).startswith('0 listeners of the command, at least 1 needed')
    assert said(image_age=0.4).startswith(
        'the newest image is 0.400 s old, at most 0.25 s allowed')
    assert said(condition=2000.0, smallest=2e-4).startswith(
        'condition 2e+03 and smallest singular value 0.0002, at most 1000 and at least 0.001')
    assert said(late_in_a_row=7, late=0.0123).startswith(
        '7 ticks in a row came late, the last by 12.3 ms, at most 5 allowed')
    assert said(slept=0.5).startswith(
        'the loop did not run for 0.500 s, at most 0.12 s allowed; free a core')
    assert said(crowded=0.8).startswith('80 % of the points crowd the image border, at most 70 %')
    assert said(crowded=0.5).startswith('50 % of the points crowd the image border, full speed up')
    assert said(heartbeat__required=True, heartbeat_age=math.inf).startswith(
        'no heartbeat so far, at most 0.5 s allowed')
    assert said(exception='KeyError: 3').startswith(
        'an error of the program, expected none, got KeyError: 3')
    assert said(calibrated=False).startswith(
        'camera_info: expected a calibration, got none so far')
    assert said(calibrated=False, camera_fault='camera_info: fx = 0').startswith(
        'camera_info: fx = 0; calibrate')
    assert said(**bad(Reason.TOO_FEW_POINTS)).startswith(TEXT + '; bring')
    assert said(camera_changed='camera_info: expected a, got b').startswith(
        'camera_info: expected a, got b; use')


def test_points_at_the_border_slow_the_camera_in_proportion_and_then_stop_it():
    assert slowdown(situation(crowded=0.4)) == 1.0
    assert slowdown(situation(crowded=0.55)) == pytest.approx(0.5)
    assert slowdown(situation(crowded=0.7)) == 0.0
    assert slowdown(situation(crowded=0.9)) == 0.0
    assert slowdown(situation(crowded=math.nan)) == 0.0
    assert slowdown(situation(
        crowded=0.5, watchdog__crowd_slow=0.5, watchdog__crowd_hold=0.5)) == 1.0
    assert slowdown(situation(
        crowded=0.6, watchdog__crowd_slow=0.5, watchdog__crowd_hold=0.5)) == 0.0


@given(st.floats(0, 1), st.floats(0, 1))
def test_more_points_at_the_border_never_mean_more_speed(a, b):
    low, high = sorted((a, b))
    assert 0.0 <= slowdown(situation(crowded=high)) <= slowdown(situation(crowded=low)) <= 1.0


def test_a_situation_s_defaults_are_those_of_a_loop_at_its_best():
    assert isinstance(situation(), Situation)
    assert all(row.count(situation()) == 0 for row in TABLE)
