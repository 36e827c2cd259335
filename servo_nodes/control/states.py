# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The states of the controller as a table; the documentation's diagram is drawn from it."""

from __future__ import annotations

import enum
import typing

from servo_nodes.values import State


class Event(enum.Enum):
    """What can happen to a state."""

    ENGAGE = 'engage'
    DISENGAGE = 'disengage'
    HOLD = 'hold'
    RELEASE = 'release'
    SETTLE = 'settle'
    LEAVE = 'leave'
    FAULT = 'fault'
    JUMP = 'clock jump'
    RESET = 'reset'


class Transition(typing.NamedTuple):
    """One arrow of the diagram."""

    source: State
    event: Event
    target: State


ENGAGED = frozenset((State.SERVOING, State.HOLDING, State.SETTLED))
MOVING = frozenset((State.SERVOING, State.SETTLED))

TABLE = (
    Transition(State.STANDBY, Event.ENGAGE, State.SERVOING),
    Transition(State.SERVOING, Event.SETTLE, State.SETTLED),
    Transition(State.SETTLED, Event.LEAVE, State.SERVOING),
    Transition(State.SERVOING, Event.HOLD, State.HOLDING),
    Transition(State.SETTLED, Event.HOLD, State.HOLDING),
    Transition(State.HOLDING, Event.RELEASE, State.SERVOING),
    Transition(State.SERVOING, Event.DISENGAGE, State.STANDBY),
    Transition(State.HOLDING, Event.DISENGAGE, State.STANDBY),
    Transition(State.SETTLED, Event.DISENGAGE, State.STANDBY),
    Transition(State.SERVOING, Event.JUMP, State.STANDBY),
    Transition(State.HOLDING, Event.JUMP, State.STANDBY),
    Transition(State.SETTLED, Event.JUMP, State.STANDBY),
    Transition(State.STANDBY, Event.FAULT, State.FAULTED),
    Transition(State.SERVOING, Event.FAULT, State.FAULTED),
    Transition(State.HOLDING, Event.FAULT, State.FAULTED),
    Transition(State.SETTLED, Event.FAULT, State.FAULTED),
    Transition(State.FAULTED, Event.RESET, State.STANDBY),
)

_TARGETS = {(row.source, row.event): row.target for row in TABLE}


def after(state: State, event: Event) -> State:
    """Return the state after `event`; an event without a row leaves the state as it is."""
    return _TARGETS.get((state, event), state)


def diagram() -> str:
    """Return the table as a Mermaid state diagram, arrows between the same states joined."""
    arrows: dict[tuple[State, State], list[str]] = {}
    for row in TABLE:
        arrows.setdefault((row.source, row.target), []).append(row.event.value)
    lines = ['stateDiagram-v2', f'    [*] --> {State.STANDBY.value}']
    lines += [f'    {source.value} --> {target.value}: {", ".join(events)}'
              for (source, target), events in arrows.items()]
    return '\n'.join(lines) + '\n'
