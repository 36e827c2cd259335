# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Read a record's events as spans of one state, and its stops with what came before and after."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from servo_nodes.report.record import Event, Record
from servo_nodes.values import SECOND_NS, Stamp

STOPPED = ('holding', 'faulted')
_AT_REST = 0.0


@dataclass(frozen=True)
class Span:
    """A stretch of time in one state for one reason; `start` and `end` in ns."""

    start: Stamp
    end: Stamp
    event: Event

    @property
    def seconds(self) -> float:
        """Return how long it lasted, s."""
        return (self.end - self.start) / SECOND_NS


@dataclass(frozen=True)
class Stop:
    """A stop and how fast it was.

    Attributes
    ----------
    span : Span, the time in `holding` or `faulted`, with the reason that began it
    then : other reasons that came up while it lasted
    last_seen : int or None, ns, the last time before it that points were seen
    still : int or None, ns, the first command of exact zero since then; None: never, or not known
    """

    span: Span
    then: tuple[str, ...]
    last_seen: Stamp | None
    still: Stamp | None

    @property
    def reaction(self) -> float | None:
        """Return the seconds from the last points heard to exact zero; None when not known."""
        if self.last_seen is None or self.still is None:
            return None
        return (self.still - self.last_seen) / SECOND_NS

    @property
    def braking(self) -> float | None:
        """Return the seconds from the decision to exact zero; None when not known."""
        return None if self.still is None else max(0, self.still - self.span.start) / SECOND_NS


def spans(record: Record) -> list[Span]:
    """Return the record's time as spans; each lasts until the next event, the last to the end."""
    ends = [event.stamp for event in record.events[1:]] + [record.end]
    return [Span(event.stamp, end, event)
            for event, end in zip(record.events, ends, strict=True)] if record.events else []


def stops(record: Record) -> list[Stop]:
    """Return every time the controller held or had faulted, in order; reasons may change."""
    groups: list[list[Span]] = []
    for span in spans(record):
        if span.event.state not in STOPPED:
            continue
        last = groups[-1][-1] if groups else None
        if last is not None and (last.end, last.event.state) == (span.start, span.event.state):
            groups[-1].append(span)
        else:
            groups.append([span])
    return [_stop(record, group) for group in groups]


def _stop(record: Record, group: list[Span]) -> Stop:
    whole = Span(group[0].start, group[-1].end, group[0].event)
    reasons = dict.fromkeys(span.event.reason for span in group)
    return Stop(whole, tuple(reasons)[1:], _last_seen(record, whole.start),
                _still(record, whole))


def _last_seen(record: Record, before: Stamp) -> Stamp | None:
    points = record.series.get('points')
    if points is None:
        return None
    times = points.times[(points.values[:, 0] > 0) & (points.times <= before)]
    return int(times[-1]) if len(times) else None


def _still(record: Record, span: Span) -> Stamp | None:
    twist = record.series.get('twist')
    if twist is None:
        return None
    inside = (twist.times >= span.start) & (twist.times <= span.end)
    zero = inside & (np.abs(twist.values).max(axis=1) == _AT_REST)
    return int(twist.times[zero][0]) if zero.any() else None
