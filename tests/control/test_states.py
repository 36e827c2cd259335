# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The table of states: what the design promises of it."""

from __future__ import annotations

import itertools
import random

import pytest

from servo_nodes.control import states
from servo_nodes.control.states import ENGAGED, MOVING, TABLE, Event, after
from servo_nodes.values import State

ALLOWED = {
    (State.STANDBY, Event.ENGAGE): State.SERVOING,
    (State.STANDBY, Event.FAULT): State.FAULTED,
    (State.SERVOING, Event.SETTLE): State.SETTLED,
    (State.SERVOING, Event.HOLD): State.HOLDING,
    (State.SERVOING, Event.DISENGAGE): State.STANDBY,
    (State.SERVOING, Event.JUMP): State.STANDBY,
    (State.SERVOING, Event.FAULT): State.FAULTED,
    (State.SETTLED, Event.LEAVE): State.SERVOING,
    (State.SETTLED, Event.HOLD): State.HOLDING,
    (State.SETTLED, Event.DISENGAGE): State.STANDBY,
    (State.SETTLED, Event.JUMP): State.STANDBY,
    (State.SETTLED, Event.FAULT): State.FAULTED,
    (State.HOLDING, Event.RELEASE): State.SERVOING,
    (State.HOLDING, Event.DISENGAGE): State.STANDBY,
    (State.HOLDING, Event.JUMP): State.STANDBY,
    (State.HOLDING, Event.FAULT): State.FAULTED,
    (State.FAULTED, Event.RESET): State.STANDBY,
}


@pytest.mark.parametrize(('state', 'event'), list(itertools.product(State, Event)))
def test_every_pair_of_state_and_event_leads_where_the_design_says(state, event):
    assert after(state, event) is ALLOWED.get((state, event), state)


def test_a_pair_has_one_row():
    pairs = [(row.source, row.event) for row in TABLE]
    assert len(pairs) == len(set(pairs))


def test_a_fault_is_left_by_reset_alone_and_into_standby():
    for event in Event:
        target = after(State.FAULTED, event)
        assert target is (State.STANDBY if event is Event.RESET else State.FAULTED)


def test_every_state_faults_and_every_engaged_state_can_be_left():
    assert all(after(state, Event.FAULT) is State.FAULTED for state in State)
    assert all(after(state, Event.DISENGAGE) is State.STANDBY for state in ENGAGED)
    assert all(after(state, Event.JUMP) is State.STANDBY for state in ENGAGED)


def test_the_camera_moves_only_after_engage_in_any_order_of_events():
    rng = random.Random(5)
    state, engaged = State.STANDBY, False
    visited = set()
    for _ in range(20_000):
        event = rng.choice(list(Event))
        before, state = state, after(state, event)
        if before is State.STANDBY and event is Event.ENGAGE:
            engaged = True
        if state in (State.STANDBY, State.FAULTED):
            engaged = False
        assert (state in MOVING) <= engaged
        visited.add(state)
    assert visited == set(State)


def test_the_diagram_draws_every_row_and_nothing_else():
    lines = states.diagram().splitlines()
    assert lines[:2] == ['stateDiagram-v2', '    [*] --> standby']
    drawn = set()
    for line in lines[2:]:
        arrow, events = line.strip().split(': ')
        source, target = arrow.split(' --> ')
        drawn |= {(source, event, target) for event in events.split(', ')}
    assert drawn == {(row.source.value, row.event.value, row.target.value) for row in TABLE}
