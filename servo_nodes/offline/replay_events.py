# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Recorded messages -> timed events for the loop, and what the recorded controller did.

The axis of time is the one on which the messages were recorded. Stamps are carried over to it as
a node carries them over to its steady clock: a stamp keeps its age. A command is stamped when it
is sent, so that its stamp tells how late the recorder was, by which everything is taken back.
Requests leave no message: they are read off the commands, which are published only while the loop
is on, and off the state.
"""

from __future__ import annotations

import collections
import typing
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field

from servo_nodes import wire
from servo_nodes.control.states import ENGAGED
from servo_nodes.offline.bags import Bag
from servo_nodes.offline.loops import Event, Kind
from servo_nodes.offline.replay_settings import Choice, Names, merged, names_from_event
from servo_nodes.offline.replay_time import Axis, Decoder, lag_at_start, lag_of
from servo_nodes.tracking.pictures import image_from_bytes
from servo_nodes.values import SECOND_NS, Reason, Stamp, State, Twist

SILENCE_NS = SECOND_NS // 4
LATE_NS = SECOND_NS // 10
_ENGAGED = frozenset(state.value for state in ENGAGED)
_STATES = frozenset(state.value for state in State)


class Turn(typing.NamedTuple):
    """The recorded controller said that it is in a state now."""

    time: Stamp
    state: str
    reason: str
    detail: str


@dataclass
class Recorded:
    """What the recorded controller did, filled while the messages go by.

    Attributes
    ----------
    turns : changes of state and reason that it told
    commands : int, how many it sent
    dropped : how many messages of a part could not be read, and the first sentence about one
    latest : int, ns, how late the recorder was at most
    """

    turns: list[Turn] = field(default_factory=list)
    commands: int = 0
    dropped: dict[str, tuple[int, str]] = field(default_factory=dict)
    latest: Stamp = 0

    def drop(self, part: str, text: str) -> None:
        """Count a message that could not be read."""
        count, first = self.dropped.get(part, (0, text))
        self.dropped[part] = count + 1, first


def recorded_names(bag: Bag, parts: Mapping[str, str], notes: list[str]) -> Names:
    """Return the parameters that the nodes declared in the recording."""
    names, decode = Names(), Decoder()
    topic = parts.get('parameters')
    for message in bag.messages([topic]) if topic else ():
        try:
            names_from_event(decode(message), names, changed=False)
        except ValueError as error:
            notes.append(str(error))
    return names


def led(events: Iterable[Event], period: Stamp) -> Iterator[Event]:
    """Yield the events, and one period, ns, before each ENGAGE a tick.

    The recorded controller ticked then, too, but sends nothing before it is engaged; its first
    step depends on how long ago that tick was.
    """
    held: collections.deque[Event] = collections.deque()
    for event in events:
        if event.kind is Kind.ENGAGE and event.value:
            before = event.time - period
            while held and held[0].time <= before:
                yield held.popleft()
            yield Event(before, Kind.TICK)
        held.append(event)
        while held[0].time < event.time - period:
            yield held.popleft()
    yield from held


class Script:
    """The events of a recording, in order.

    Parameters
    ----------
    bag : Bag
    parts : topic of every part
    choice : Choice, the settings at the start
    images : bool, whether images and depths are wanted
    live_parameters : bool, whether recorded changes of parameters are followed
    """

    def __init__(self, bag: Bag, parts: Mapping[str, str], choice: Choice, *,
                 images: bool, live_parameters: bool = True) -> None:
        unwanted = set() if images else {'image', 'compressed', 'depth'}
        unwanted |= set() if live_parameters else {'parameters'}
        self._parts = {topic: part for part, topic in parts.items() if part not in unwanted}
        self._guessed = not {'command', 'state'} & set(self._parts.values())
        self._bag, self._decode, self._choice = bag, Decoder(), choice
        self._axis = Axis()
        self._engaged = False
        self._faulted = False
        self._commanded: Stamp | None = None
        self._lag = lag_at_start(bag, parts)
        self._lagging = 'clock' not in parts
        self.recorded = Recorded()

    @property
    def note(self) -> str:
        """Return what is odd about the clocks; empty for nothing."""
        if self.recorded.latest > LATE_NS:
            return (f'the recorder was up to {self.recorded.latest / SECOND_NS:.2f} s late; times '
                    'were taken back by what the stamps of the commands tell')
        return self._axis.note

    def events(self) -> Iterator[Event]:
        """Yield the events; the first says that somebody listens, which no message tells."""
        if self._guessed:
            return self._read()
        return led(self._read(), round(SECOND_NS / self._choice.controller.rate))

    def _read(self) -> Iterator[Event]:
        first = True
        for message in self._bag.messages(self._parts):
            if first:
                first = False
                yield Event(message.time - self._lag, Kind.GRAPH, (1, 1))
                if self._guessed:
                    yield Event(message.time, Kind.ENGAGE, True)
            part = self._parts[message.topic]
            time = message.time - self._lag
            try:
                decoded = self._decode(message)
                if part == 'command' and self._lagging:
                    self._lag = lag_of(message.time, wire.stamp_from_time(decoded.header.stamp))
                    self.recorded.latest = max(self.recorded.latest, self._lag)
                    time = message.time - self._lag
                yield from self._taken(part, time, decoded)
            except ValueError as error:
                self.recorded.drop(part, str(error))
                if part == 'features':
                    yield Event(time, Kind.REFUSED, (Reason.NOT_FINITE, str(error)))

    def _taken(self, part: str, time: Stamp, message: typing.Any) -> Iterator[Event]:
        if part == 'command':
            yield from self._command(time, wire.twist_from_message(message))
        elif part == 'features':
            view = wire.view_from_cloud(message)
            yield self._seen(time, Kind.VIEW, view)
        elif part in ('image', 'compressed'):
            image = (wire.image_from_message(message) if part == 'image' else image_from_bytes(
                message.data, wire.stamp_from_time(message.header.stamp),
                str(message.header.frame_id)))
            yield self._seen(time, Kind.IMAGE, image)
        elif part == 'depth':
            yield Event(time, Kind.DEPTH, wire.image_from_message(message))
        elif part == 'camera_info':
            yield Event(time, Kind.CALIBRATION, wire.calibration_from_message(message))
        elif part == 'state':
            yield from self._state(time, message)
        elif part == 'halt':
            yield Event(time, Kind.HALT, bool(message.data))
        elif part == 'heartbeat':
            yield Event(time, Kind.HEARTBEAT)
        elif part == 'clock':
            if self._axis.set_clock(wire.stamp_from_time(message.clock)):
                yield Event(time, Kind.JUMP)
        elif part == 'parameters':
            yield from self._parameters(time, message)

    def _seen(self, time: Stamp, kind: Kind, value: typing.Any) -> Event:
        """Return the event of an image or a view, which cannot come before it was taken."""
        stamp = self._axis.moved(value.stamp, time)
        return Event(max(time, stamp) if self._lag else time, kind, value, stamp)

    def _command(self, time: Stamp, twist: Twist) -> Iterator[Event]:
        """Tick when the recorded controller did; commands after silence: it was engaged."""
        silent = self._commanded is None or time - self._commanded > SILENCE_NS
        self._commanded = time
        self.recorded.commands += 1
        if silent:
            told = bool(self.recorded.turns)
            if self._engaged and not told:
                yield Event(time, Kind.ENGAGE, False)
            if not self._engaged or not told:
                yield from self._engage(time)
        yield Event(time, Kind.TICK, twist)

    def _engage(self, time: Stamp) -> Iterator[Event]:
        yield Event(time, Kind.RESET)
        self._engaged = True
        yield Event(time, Kind.ENGAGE, True)

    def _state(self, time: Stamp, message: typing.Any) -> Iterator[Event]:
        values = {str(item.key): str(item.value) for item in message.values}
        turn = Turn(time, str(message.message), values.get('reason', ''),
                    values.get('detail', ''))
        if turn.state not in _STATES:
            raise ValueError(f'state: expected one of {", ".join(sorted(_STATES))}, '
                             f'got {turn.state[:40]!r}')
        last = self.recorded.turns[-1] if self.recorded.turns else None
        if last is None or (last.state, last.reason) != (turn.state, turn.reason):
            self.recorded.turns.append(turn)
        if turn.state == State.STANDBY.value:
            if self._faulted:
                yield Event(time, Kind.RESET)
            elif self._engaged:
                yield Event(time, Kind.ENGAGE, False)
            self._engaged = False
        elif turn.state in _ENGAGED and not self._engaged:
            yield from self._engage(time)
        self._faulted = turn.state == State.FAULTED.value

    def _parameters(self, time: Stamp, message: typing.Any) -> Iterator[Event]:
        """Follow a parameter that was changed while recording."""
        names = Names()
        node = names_from_event(message, names, changed=True)
        if node not in ('tracker', 'controller') or not names.of[node]:
            return
        old = getattr(self._choice, node)
        new = merged(type(old), old, names.of[node])
        if new != old:
            self._choice = (Choice(new, self._choice.controller, self._choice.rectified)
                            if node == 'tracker' else
                            Choice(self._choice.tracker, new, self._choice.rectified))
            yield Event(time, Kind.SETTINGS, new)
