# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Stops are read from a record with the times that people ask for."""

from __future__ import annotations

import pytest

from servo_nodes.report.record import Event, Recorder, Verdict
from servo_nodes.report.stops import spans, stops
from tests.report.runs import HELD, LAST_HEARD, ORIGIN, RELEASED, SECOND, STILL, record_of_a_run


def test_spans_fill_the_time_without_gaps():
    found = spans(record_of_a_run())
    assert [span.event.state for span in found] == [
        'standby', 'servoing', 'holding', 'servoing', 'settled']
    assert found[0].start == ORIGIN
    assert found[-1].end == ORIGIN + 6 * SECOND
    assert all(before.end == after.start for before, after in zip(found, found[1:], strict=False))


def test_a_stop_tells_from_when_to_when_and_how_fast():
    (stop,) = stops(record_of_a_run())
    assert (stop.span.start, stop.span.end) == (HELD, RELEASED)
    assert stop.span.event.reason == 'features_silent'
    assert (stop.last_seen, stop.still) == (LAST_HEARD, STILL)
    assert stop.reaction == pytest.approx((STILL - LAST_HEARD) / SECOND)
    assert stop.braking == pytest.approx((STILL - HELD) / SECOND)


def test_images_in_which_nothing_is_seen_do_not_count_as_seen():
    recorder = Recorder('occluded')
    recorder.declare('points', '1', 'seen')
    for stamp, seen in ((1, 40), (2, 0), (3, 0)):
        recorder.note('points', stamp, seen)
    recorder.turn(Event(4, 'holding', 'too_few_points'))
    (stop,) = stops(recorder.record(Verdict(None, '')))
    assert stop.last_seen == 1


def test_what_the_record_does_not_know_is_none_not_a_guess():
    recorder = Recorder('bare')
    recorder.turn(Event(4, 'faulted', 'halted'))
    (stop,) = stops(recorder.record(Verdict(None, '')))
    assert (stop.last_seen, stop.still, stop.reaction, stop.braking) == (None,) * 4


def test_a_stop_that_never_reached_zero_has_no_reaction_time():
    recorder = Recorder('creeping')
    recorder.declare('twist', 'm/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz')
    recorder.turn(Event(4, 'holding', 'overrun'))
    recorder.note('twist', 5, 0, 0, 0, 0, 0, 1e-9)
    (stop,) = stops(recorder.record(Verdict(None, '')))
    assert stop.still is None


def test_a_stop_whose_reason_changes_is_one_stop_with_both_reasons():
    recorder = Recorder('changing')
    for event in (Event(1, 'servoing'), Event(2, 'holding', 'features_silent'),
                  Event(3, 'holding', 'features_stale'), Event(4, 'holding', 'features_silent'),
                  Event(5, 'servoing'), Event(6, 'holding', 'image_silent'),
                  Event(7, 'faulted', 'halted')):
        recorder.turn(event)
    found = stops(recorder.record(Verdict(None, '')))
    assert [(stop.span.start, stop.span.event.reason, stop.then) for stop in found] == [
        (2, 'features_silent', ('features_stale',)), (6, 'image_silent', ()),
        (7, 'halted', ())]
    assert found[0].span.end == 5
