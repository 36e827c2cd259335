# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The parts of a verdict: thinned rows, counted figures, recorded stops, JUnit, comparisons."""

from __future__ import annotations

import math
import xml.etree.ElementTree as ET

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.offline import junit, verdict
from servo_nodes.offline.replay_events import Recorded, Turn
from servo_nodes.offline.replay_log import Log, Spans, overlapping
from servo_nodes.offline.replay_rows import Rows, Spread
from servo_nodes.offline.replay_time import Axis
from servo_nodes.offline.verdict import AgainstLimits, Finding, Thresholds, thresholds_from_file
from servo_nodes.offline.verdict_against import compared
from servo_nodes.report.record import Event, Record, Series, Verdict


@given(st.integers(0, 5000), st.integers(8, 100))
def test_rows_stay_few_evenly_spread_and_in_order(count, most):
    rows = Rows('1', 'value', most=most)
    for time in range(count):
        rows.add(time, (float(time),))
    series = rows.series()
    assert len(rows) < most and (series.times == series.values[:, 0]).all()
    if count:
        assert series.times[0] == 0 and len(set(np.diff(series.times))) <= 1
        assert len(rows) >= min(count, most // 4)


def test_marked_rows_stay_while_the_others_go():
    rows = Rows('1', 'value', most=64)
    for time in range(1000):
        rows.add(time, (0.0,), mark=time in (333, 777))
    assert {333, 777} <= set(rows.series().times.tolist())


@given(st.lists(st.floats(0.0, 100.0), min_size=1, max_size=200), st.floats(0.01, 1.0))
def test_a_quantile_is_that_of_numpy_within_one_percent_and_never_below(values, share):
    """numpy.quantile with the method inverted_cdf is the same definition."""
    spread = Spread()
    for value in values:
        spread.add(value)
    want = float(np.quantile(values, share, method='inverted_cdf'))
    got = spread.quantile(share)
    assert want * (1 - 1e-9) <= got + Spread.LEAST and got <= want * 1.011 + Spread.LEAST
    assert spread.most == max(values)


def test_a_number_that_is_none_counts_as_the_worst():
    spread = Spread()
    for value in (1.0, math.nan):
        spread.add(value)
    assert spread.most == math.inf and spread.quantile(1.0) > 1e4
    assert math.isnan(Spread().quantile(0.5))


def test_a_recorded_stop_is_rest_between_motions_and_one_before_silence_is_not_sure():
    spans = Spans()
    moving = [*[False] * 5, *[True] * 5, *[False] * 10, *[True] * 5, *[False] * 20]
    for number, moves in enumerate(moving):
        spans.take(number * 10_000_000, moves)
    spans.end()
    assert spans.found == [(100_000_000, 200_000_000, True), (250_000_000, 440_000_000, False)]


@given(st.lists(st.tuples(st.integers(0, 1000), st.integers(0, 50)), max_size=12),
       st.integers(0, 1000), st.integers(0, 100), st.integers(0, 30))
def test_overlapping_is_what_trying_each_says(items, start, length, slack):
    spans, at = [], 0
    for gap, size in items:
        spans.append((at + gap, at + gap + size))
        at += gap + size + 1
    want = any(first <= start + length + slack and last >= start - slack for first, last in spans)
    assert overlapping(start, start + length, spans, slack) == want


def test_recorded_holds_that_follow_each_other_are_one_stop():
    turns = [Turn(0, 'servoing', 'none', ''), Turn(5, 'holding', 'too_few_points', ''),
             Turn(7, 'holding', 'features_silent', ''), Turn(9, 'servoing', 'none', ''),
             Turn(12, 'faulted', 'halted', '')]
    log = Log(4)
    log.last = 20
    assert verdict.recorded_stops(log, Recorded(turns=turns)) == [(5, 9, True), (12, 20, True)]


def test_nothing_judged_is_not_passed():
    assert not verdict.passed([])
    assert not verdict.passed([Finding('a', None, 0.0, 0.0, '', '')])


def test_an_empty_replay_fails_and_says_that_the_loop_was_never_on():
    findings = verdict.judged(Log(4), Recorded(), Thresholds())
    assert not verdict.passed(findings)
    assert [item.name for item in findings if item.ok is False] == ['engaged']


@pytest.mark.parametrize(('text', 'words'), [
    ('stop.tim: 1', "did you mean 'stop.time'"), ('stop: {time: -1}', 'time: expected'),
    ('stop.time: true', 'stop.time: expected'), ('[1]', 'names and values')])
def test_wrong_thresholds_are_refused_with_their_file(tmp_path, text, words):
    path = tmp_path / 'limits.yaml'
    path.write_text(text)
    with pytest.raises(ValueError, match=f'limits.yaml: .*{words}'):
        thresholds_from_file(path)


def test_junit_survives_any_words():
    findings = [Finding('a', False, 1.0, 0.0, '', 'less < more & "quoted" \x00\x1b \ud800 ü')]
    root = ET.fromstring(junit.text_from_findings('run\x07', findings, ['damage \x08']).encode())
    assert root[0].get('failures') == root[0].get('errors') == '1'
    assert root[0][0].find('failure').get('message').startswith('less < more & "quoted" ??')


def run(times=range(10), speed=0.01, states=('standby', 'servoing')):
    """Return a record of a constant twist."""
    times = np.array(times, np.int64)
    twist = np.zeros((len(times), 6))
    twist[:, 0] = speed
    return Record('run', Verdict(True, ''), series={
        'twist': Series('m/s', tuple('abcdef'), times, twist),
        'points': Series('1', ('seen',), times, np.full((len(times), 1), 30.0)),
        'error': Series('px', ('error',), times, np.full((len(times), 1), 1.0))},
        events=[Event(number, state) for number, state in enumerate(states)])


@pytest.mark.parametrize(('other', 'failed'), [
    (run(), set()), (run(speed=0.02), {'against.linear'}),
    (run(times=range(100, 110)), {'against.linear', 'against.angular'}),
    (run(states=('standby',)), {'against.states'}),
    (Record('run', Verdict(True, '')), {'against.linear', 'against.angular', 'against.points',
                                        'against.error_px', 'against.states'})])
def test_two_replays_agree_in_everything_or_the_difference_is_named(other, failed):
    findings = compared(run(), other, AgainstLimits())
    assert {item.name for item in findings if item.ok is False} == failed


def test_stamps_keep_their_age_under_a_simulated_clock_and_their_order():
    axis = Axis()
    assert not axis.set_clock(5_000)
    assert axis.moved(4_000, 1_000_000) == 999_000
    assert axis.moved(4_000, 1_000_300) == 999_000
    assert axis.moved(4_001, 1_000_000) == 999_001
    assert axis.moved(0, 1_000_000) == 0
    assert axis.set_clock(10)
