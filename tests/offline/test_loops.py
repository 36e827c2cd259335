# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The loop without a clock."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.control.controller import Controller, ControllerSettings
from servo_nodes.offline.loops import (
    LONGEST_SILENCE_NS,
    Decided,
    Event,
    Handed,
    Kind,
    Looked,
    Loop,
    Skipped,
    Told,
)
from servo_nodes.simulation.simulator import Simulator, SimulatorSettings
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from servo_nodes.values import Image, Reason, State, View
from tests.offline.recordings import home_goal

PERIOD = 10_000_000
CALIBRATION = Simulator(SimulatorSettings(), np.random.default_rng(0)).calibration
FRAME = CALIBRATION.frame_id


def view(stamp, shift=0.1):
    """Return a view of a square that lies `shift` off its goal."""
    goal = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]) * 0.2
    return View(stamp, FRAME, goal + shift, goal, np.full(4, 0.5), np.full(4, 0.5), np.ones(4),
                np.arange(4))


def ready(until, every=3 * PERIOD, start=PERIOD):
    """Return events of a loop that is calibrated, engaged, and sees something."""
    return [Event(start, Kind.GRAPH, (1, 1)), Event(start, Kind.CALIBRATION, CALIBRATION),
            Event(start, Kind.ENGAGE, True),
            *(Event(time, Kind.VIEW, view(time)) for time in range(start, until, every))]


def decided(outcomes):
    """Return time and state of every decision."""
    return [(item.time, item.command.state) for item in outcomes if isinstance(item, Decided)]


def run(events, until=None, tracker=None, **options):
    """Return what a fresh loop makes of events."""
    return list(Loop(Controller(ControllerSettings()), tracker, **options).run(events, until))


def test_it_ticks_at_the_rate_from_the_first_event_to_the_end():
    outcomes = run([Event(7, Kind.GRAPH, (1, 1))], until=7 + 5 * PERIOD)
    times = [time for time, _ in decided(outcomes)]
    assert times == [7 + number * PERIOD for number in range(6)]


def test_an_event_comes_before_the_tick_of_its_time():
    outcomes = run(ready(10 * PERIOD), until=10 * PERIOD)
    kinds = [type(item) for item in outcomes[:3]]
    assert kinds == [Told, Handed, Told] or kinds == [Told, Handed, Decided]
    first = next(item for item in outcomes if isinstance(item, Handed))
    assert first.time == PERIOD and decided(outcomes)[0][0] == PERIOD


def test_a_request_that_is_refused_is_repeated_until_it_can_be_granted():
    outcomes = run(ready(20 * PERIOD), until=20 * PERIOD)
    answers = [item.answer.ok for item in outcomes
               if isinstance(item, Told) and item.kind is Kind.ENGAGE]
    assert answers == [False, True]
    assert decided(outcomes)[-1][1] is State.SERVOING


def test_a_granted_request_is_not_repeated_after_it_was_taken_back():
    events = [*ready(20 * PERIOD), Event(12 * PERIOD, Kind.ENGAGE, False)]
    outcomes = run(sorted(events, key=lambda event: event.time), until=30 * PERIOD)
    assert decided(outcomes)[-1][1] is State.STANDBY


def test_given_ticks_replace_its_own_and_hand_back_what_they_carry():
    given_ticks = [Event(PERIOD + number * PERIOD + 1234, Kind.TICK, number)
                   for number in range(20)]
    outcomes = run([Event(PERIOD, Kind.GRAPH, (1, 1)), *given_ticks], until=21 * PERIOD)
    times = [item.time for item in outcomes if isinstance(item, Decided)][1:]
    assert times == [event.time for event in given_ticks]
    assert [item.given for item in outcomes if isinstance(item, Decided)][1:] == list(range(20))


def test_its_own_ticks_fill_in_where_given_ones_are_missing():
    events = [Event(PERIOD, Kind.TICK), Event(2 * PERIOD, Kind.TICK)]
    times = [time for time, _ in decided(run(events, until=6 * PERIOD))]
    assert times == [PERIOD, 2 * PERIOD, 4 * PERIOD, 5 * PERIOD, 6 * PERIOD]


def test_a_long_silence_is_skipped_and_told():
    late = 100 * LONGEST_SILENCE_NS
    outcomes = run([Event(0, Kind.GRAPH, (1, 1)), Event(late, Kind.GRAPH, (1, 1))], until=late)
    skipped = [item for item in outcomes if isinstance(item, Skipped)]
    assert [item.until for item in skipped] == [late]
    assert len(decided(outcomes)) <= LONGEST_SILENCE_NS / PERIOD + 3
    assert decided(outcomes)[-1][0] == late


def test_time_never_goes_back():
    events = [Event(5 * PERIOD, Kind.GRAPH, (1, 1)), Event(PERIOD, Kind.VIEW, view(PERIOD))]
    outcomes = run(events, until=6 * PERIOD)
    handed = next(item for item in outcomes if isinstance(item, Handed))
    assert handed.time == 5 * PERIOD


def test_a_stamp_on_the_axis_replaces_the_one_in_the_view():
    handed = next(item for item in run([Event(9, Kind.VIEW, view(77), 5)])
                  if isinstance(item, Handed))
    assert handed.view.stamp == 5


@pytest.mark.parametrize(('kind', 'value', 'reason'), [
    (Kind.HALT, True, Reason.HALTED), (Kind.GRAPH, (0, 1), Reason.NO_LISTENER),
    (Kind.GRAPH, (1, 2), Reason.SECOND_PUBLISHER), (Kind.JUMP, None, Reason.CLOCK_JUMP)])
def test_every_outside_signal_reaches_the_controller(kind, value, reason):
    events = [*ready(12 * PERIOD), Event(11 * PERIOD, kind, value)]
    outcomes = run(sorted(events, key=lambda event: event.time), until=12 * PERIOD)
    assert reason in {item.command.reason for item in outcomes if isinstance(item, Decided)}


def test_a_refused_message_and_a_heartbeat_reach_the_controller():
    settings = ControllerSettings()
    controller = Controller(settings)
    list(Loop(controller).run([Event(1, Kind.REFUSED, (Reason.NOT_FINITE, 'expected, got')),
                               Event(2, Kind.TICK)]))
    assert controller.dropped[Reason.NOT_FINITE] == 1


def test_reset_is_asked_only_of_a_faulted_controller():
    events = [*ready(12 * PERIOD), Event(10 * PERIOD, Kind.RESET),
              Event(11 * PERIOD, Kind.HALT, True), Event(14 * PERIOD, Kind.HALT, False),
              Event(15 * PERIOD, Kind.RESET)]
    outcomes = run(sorted(events, key=lambda event: event.time), until=16 * PERIOD)
    told = [item for item in outcomes if isinstance(item, Told) and item.kind is Kind.RESET]
    assert [(item.time, item.answer.ok) for item in told] == [(15 * PERIOD, True)]


@pytest.fixture(scope='module')
def picture():
    """Return the image of a simulated camera at home, without noise."""
    goal = home_goal()
    return goal, Image(goal.view, 'mono8', 0, FRAME)


def tracker(goal):
    """Return a tracker that has its goal."""
    made = Tracker(TrackerSettings(), np.random.default_rng(0))
    made.aim(goal)
    return made


def test_images_go_through_the_tracker_at_once(picture):
    goal, image = picture
    outcomes = run([Event(1, Kind.CALIBRATION, CALIBRATION), Event(2, Kind.IMAGE, image, 2)],
                   tracker=tracker(goal))
    looked, handed = outcomes[-2:]
    assert isinstance(looked, Looked) and isinstance(handed, Handed)
    assert looked.status.acquired and len(handed.view) == len(looked.view) > 30
    assert handed.view.stamp == 2


def test_paired_the_views_come_when_the_recorded_ones_came(picture):
    goal, image = picture
    recorded = view(image.stamp)
    outcomes = run([Event(1, Kind.CALIBRATION, CALIBRATION), Event(2, Kind.IMAGE, image, 2),
                    Event(900, Kind.VIEW, recorded, 2), Event(901, Kind.VIEW, view(66), 3)],
                   tracker=tracker(goal), paired=True)
    handed = [item for item in outcomes if isinstance(item, Handed)]
    assert [item.time for item in handed] == [900]
    assert len(handed[0].view) > 30


KINDS = st.sampled_from([Kind.VIEW, Kind.TICK, Kind.ENGAGE, Kind.HALT, Kind.RESET, Kind.JUMP,
                         Kind.HEARTBEAT, Kind.GRAPH, Kind.CALIBRATION])
VALUES = {Kind.ENGAGE: True, Kind.HALT: False, Kind.GRAPH: (1, 1), Kind.CALIBRATION: CALIBRATION}


@given(st.lists(st.tuples(st.integers(0, 50 * PERIOD), KINDS), max_size=40))
def test_any_events_give_ordered_outcomes_and_the_same_ones_again(items):
    events = [Event(time, kind, view(time) if kind is Kind.VIEW else VALUES.get(kind))
              for time, kind in items]
    one, other = (run(events, until=60 * PERIOD) for _ in range(2))
    times = [item.time for item in one]
    assert times == sorted(times)
    assert ([(item.time, item.command.state, item.command.twist.vector.tolist())
             for item in one if isinstance(item, Decided)]
            == [(item.time, item.command.state, item.command.twist.vector.tolist())
                for item in other if isinstance(item, Decided)])
