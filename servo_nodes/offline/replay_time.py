# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The axis of time of a recording: stamps carried over to it, and how late the recorder was."""

from __future__ import annotations

import functools
import typing
from collections.abc import Mapping

from servo_nodes import wire
from servo_nodes.offline.bags import Bag, Message
from servo_nodes.values import SECOND_NS, Stamp

SAME_CLOCK_NS = 10 * SECOND_NS


@functools.cache
def _standard_types() -> typing.Any:
    from rosbags.typesys import Stores, get_typestore
    return get_typestore(Stores.LATEST)


class Decoder:
    """Bytes of a recorded message -> the message, by the standard definitions."""

    def __init__(self) -> None:
        self._store = _standard_types()

    def __call__(self, message: Message) -> typing.Any:
        """Return the message; ValueError with one sentence when its bytes are not of its type."""
        try:
            return self._store.deserialize_cdr(message.data, message.kind)
        except Exception as error:
            raise ValueError(f'{message.topic}: expected a {message.kind}, got '
                             f'{len(message.data)} bytes that are none') from error


class Axis:
    """Carries stamps over to the axis on which the messages were recorded."""

    def __init__(self) -> None:
        self._clock: Stamp | None = None
        self._offset: Stamp | None = None
        self._last: tuple[Stamp, Stamp] | None = None
        self.note = ''

    def set_clock(self, now: Stamp) -> bool:
        """Take the time of a simulated clock; return whether it was set back."""
        back = self._clock is not None and now < self._clock
        self._clock = now
        if back:
            self._last = None
        return back

    def moved(self, stamp: Stamp, time: Stamp) -> Stamp:
        """Return `stamp`, ns, of a message recorded at `time`, on the axis; zero stays zero."""
        if stamp == 0:
            return 0
        if self._clock is not None:
            return self._ordered(stamp, time - (self._clock - stamp))
        if self._offset is None:
            apart = abs(time - stamp) > SAME_CLOCK_NS
            self._offset = time - stamp if apart else 0
            if apart:
                self.note = (f'the stamps are {(time - stamp) / SECOND_NS:.0f} s off the time of '
                             'recording; ages are counted from the first')
        return stamp + self._offset

    def _ordered(self, stamp: Stamp, moved: Stamp) -> Stamp:
        """Keep the order of stamps, which a coarse clock would blur."""
        if self._last is not None:
            last, last_moved = self._last
            if stamp == last:
                return last_moved
            moved = max(moved, last_moved + 1) if stamp > last else min(moved, last_moved - 1)
        self._last = stamp, moved
        return moved


def lag_at_start(bag: Bag, parts: Mapping[str, str]) -> Stamp:
    """Return how late, ns, the recorder was with the first command; 0 when that is not known."""
    topic = parts.get('command')
    if topic is None or 'clock' in parts:
        return 0
    decode = Decoder()
    for message in bag.messages([topic]):
        try:
            return lag_of(message.time, wire.stamp_from_time(decode(message).header.stamp))
        except ValueError:
            continue
    return 0


def lag_of(time: Stamp, stamp: Stamp) -> Stamp:
    """Return how late a command of `stamp` was recorded at `time`, ns; 0 on different clocks."""
    lag = time - stamp
    return lag if 0 <= lag <= SAME_CLOCK_NS else 0
