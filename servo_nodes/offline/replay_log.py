# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What a replay leaves, in bounded memory: stops, figures, thinned series.

Figures are counted over every tick. Series are for the eyes: when one has become too long, every
second row goes, except those at which the state changed.
"""

from __future__ import annotations

import bisect
import hashlib
import math
import struct
from collections import Counter
from dataclasses import dataclass

import numpy as np

from servo_nodes.control.states import ENGAGED
from servo_nodes.offline.loops import Decided, Handed, Outcome, Skipped, Told
from servo_nodes.offline.replay_events import SILENCE_NS
from servo_nodes.offline.replay_rows import Rows, Spread
from servo_nodes.report.record import Event, Series
from servo_nodes.values import SECOND_NS, Command, Reason, Stamp, State, Twist

MOST_STOPS = 10000
_STOPPED = (State.HOLDING, State.FAULTED)
_DECISION = struct.Struct('<q6d')


@dataclass
class Stop:
    """The shadow stopped.

    Attributes
    ----------
    start, end : int, ns, of `holding` or `faulted`; end None: it lasts to the end
    state, reason, detail : words of the state topic
    seen : int or None, ns, when the last view with enough points had come before
    still : int or None, ns, when the command was exactly zero
    """

    start: Stamp
    state: str
    reason: str
    detail: str
    seen: Stamp | None
    still: Stamp | None = None
    end: Stamp | None = None

    @property
    def reaction(self) -> float | None:
        """Return the seconds from the last good view to exact zero; None when not known."""
        since = self.start if self.seen is None else self.seen
        return None if self.still is None else (self.still - since) / SECOND_NS


class Spans:
    """When the recorded commands were exactly zero after they had not been.

    A stretch that ends in silence may be the end of the loop as well as a stop: it is not `sure`.
    """

    def __init__(self) -> None:
        self.found: list[tuple[Stamp, Stamp, bool]] = []
        self._moved = False
        self._zero: Stamp | None = None
        self._last: Stamp = 0

    def take(self, time: Stamp, moves: bool) -> None:
        """Take a recorded command."""
        if self._zero is not None and (moves or time - self._last > SILENCE_NS):
            self._close(time if moves else self._last, time - self._last <= SILENCE_NS)
        if moves:
            self._moved = True
        elif self._moved:
            self._zero, self._moved = time, False
        self._last = time

    def end(self) -> None:
        """Close what is open."""
        if self._zero is not None:
            self._close(self._last, False)

    def _close(self, time: Stamp, sure: bool) -> None:
        assert self._zero is not None
        if len(self.found) < MOST_STOPS:
            self.found.append((self._zero, time, sure))
        self._zero = None


class Log:
    """Takes what the loop yields.

    Parameters
    ----------
    least_points : int, a view with fewer is none to go by
    """

    def __init__(self, least_points: int) -> None:
        self._least = least_points
        self.events: list[Event] = []
        self.stops: list[Stop] = []
        self.answers: list[Told] = []
        self.refusals: Counter[tuple[str, str]] = Counter()
        self.skipped = 0
        self.views = self.ticks = self.compared = self.filled = 0
        self.states: Counter[State] = Counter()
        self.points: Counter[int] = Counter()
        self.latency, self.linear, self.angular = Spread(), Spread(), Spread()
        self.spans = Spans()
        self.twists = Rows('m/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz')
        self.recorded = Rows('m/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz')
        self.errors, self.conditions = Rows('px', 'error'), Rows('1', 'condition')
        self.seen = Rows('1', 'seen')
        self.latencies = Rows('ms', 'image to features', 'features to command')
        self.first: Stamp | None = None
        self.last: Stamp = 0
        self.settled = (0, 0.0)
        self.frames: set[str] = set()
        self._hash = hashlib.sha256()
        self._state, self._reason = State.STANDBY, Reason.NONE
        self._good: Stamp | None = None
        self._received: dict[Stamp, Stamp] = {}
        self._view_stamp: Stamp | None = None

    def take(self, outcome: Outcome) -> bool:
        """Take one outcome; return whether state or reason changed with it."""
        if isinstance(outcome, Decided):
            return self._decided(outcome.time, outcome.command, outcome.given)
        if isinstance(outcome, Handed):
            self._handed(outcome)
        elif isinstance(outcome, Told):
            self._told(outcome)
        elif isinstance(outcome, Skipped):
            self.skipped += 1
        return False

    @property
    def digest(self) -> str:
        """Return a hash of every command, its time, and every change of state and reason."""
        return self._hash.hexdigest()

    def series(self) -> dict[str, Series]:
        """Return the series that are not empty, by the names that the page knows."""
        found = {'error': self.errors, 'twist': self.twists, 'recorded': self.recorded,
                 'points': self.seen, 'condition': self.conditions, 'latency': self.latencies}
        return {name: rows.series() for name, rows in found.items() if len(rows)}

    def _handed(self, outcome: Handed) -> None:
        time, view = outcome
        count = int(np.count_nonzero(view.weights))
        self.views += 1
        self.seen.add(time, (count,))
        if self._state in ENGAGED:
            self.points[count] += 1
        if count >= self._least:
            self._good = time
        self._received[view.stamp] = time
        if len(self._received) > 64:
            del self._received[next(iter(self._received))]

    def _told(self, told: Told) -> None:
        if not told.answer.ok:
            self.refusals[told.kind.value, told.answer.text.partition(':')[0]] += 1
        same = [old for old in self.answers if (old.kind, old.answer.ok) == (
            told.kind, told.answer.ok) and old.answer.text.partition(':')[0]
            == told.answer.text.partition(':')[0]]
        if not same and len(self.answers) < 100:
            self.answers.append(told)

    def _decided(self, time: Stamp, command: Command, given: Twist | None) -> bool:
        self.ticks += 1
        self.first = time if self.first is None else self.first
        self.last = time
        state, turned = command.state, False
        self.states[state] += 1
        if state is not self._state or command.reason is not self._reason or not self.events:
            turned = True
            self._turn(time, command)
            self._hash.update(f'{state.value} {command.reason.value}'.encode())
        numbers = command.twist.vector.tolist()
        self._hash.update(_DECISION.pack(time, *numbers))
        moves = any(numbers)
        stop = self.stops[-1] if self.stops else None
        stills = stop is not None and stop.still is None and stop.end is None and not moves
        if stills and stop is not None:
            stop.still = time
        self.twists.add(time, numbers, mark=turned or stills)
        if command.view_stamp != self._view_stamp and command.view_stamp is not None:
            self._note_view(time, command, command.view_stamp)
        if isinstance(given, Twist):
            self._compare(time, command, numbers, given)
        elif state in ENGAGED:
            self.filled += 1
        return turned

    def _note_view(self, time: Stamp, command: Command, stamp: Stamp) -> None:
        """Note what is new with a view that was used for the first time."""
        self._view_stamp = stamp
        figures = command.figures
        error = figures.get('error_px', math.nan)
        self.errors.add(time, (error,))
        self.conditions.add(time, (figures.get('condition', math.nan),))
        if command.state is State.SETTLED and math.isfinite(error):
            count, mean = self.settled
            self.settled = count + 1, mean + (error - mean) / (count + 1)
        received = self._received.pop(stamp, None)
        if command.state in ENGAGED:
            self.latency.add(max(0.0, (time - stamp) / SECOND_NS))
        if received is not None:
            self.latencies.add(time, ((received - stamp) / 1e6, (time - received) / 1e6))

    def _compare(self, time: Stamp, command: Command, numbers: list[float],
                 given: Twist) -> None:
        wanted = given.vector.tolist()
        self.recorded.add(time, wanted)
        self.spans.take(time, any(wanted))
        self.compared += 1
        if given.frame_id != command.twist.frame_id and len(self.frames) < 9:
            self.frames |= {given.frame_id, command.twist.frame_id}
        apart = [a - b for a, b in zip(numbers, wanted, strict=True)]
        self.linear.add(math.hypot(*apart[:3]))
        self.angular.add(math.hypot(*apart[3:]))

    def _turn(self, time: Stamp, command: Command) -> None:
        before, self._state, self._reason = self._state, command.state, command.reason
        words = command.state.value, command.reason.value, command.detail
        if len(self.events) < MOST_STOPS:
            self.events.append(Event(time, *words))
        if command.state is State.SETTLED and before is not State.SETTLED:
            self.settled = 0, 0.0
        if self.stops and self.stops[-1].end is None and command.state is not before:
            self.stops[-1].end = time
        if command.state in _STOPPED and before in ENGAGED and before is not command.state:
            if len(self.stops) < MOST_STOPS:
                self.stops.append(Stop(time, *words, self._good))


def overlapping(start: Stamp, end: Stamp, spans: list[tuple[Stamp, Stamp]], slack: Stamp) -> bool:
    """Return whether any of `spans`, in order and apart, lies within `slack`, ns, of a stretch."""
    at = bisect.bisect_left(spans, (start - slack, -1))
    near = spans[max(0, at - 1):at + 1]
    return any(first <= end + slack and last >= start - slack for first, last in near)
