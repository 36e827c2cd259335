# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the diagnostics count: durations, rates, and images that did not arrive."""

from __future__ import annotations

import collections

import numpy as np

from servo_nodes.values import SECOND_NS, Stamp


class Durations:
    """The last durations of something, in ms."""

    def __init__(self, name: str, last: int = 500) -> None:
        self._name = name
        self._values: collections.deque[float] = collections.deque(maxlen=last)

    def add(self, duration_ns: int) -> None:
        """Take one more, in ns."""
        self._values.append(duration_ns / 1e6)

    def figures(self) -> dict[str, float]:
        """Return median, 95th percentile and maximum; nothing when there was none."""
        values = list(self._values)
        if not values:
            return {}
        middle, high = np.percentile(values, (50, 95))
        return {f'{self._name}_ms_p50': float(middle), f'{self._name}_ms_p95': float(high),
                f'{self._name}_ms_max': float(max(values))}


class Arrivals:
    """A stream of stamped messages: its rate, its age, and how much of it was lost on the way.

    The loss is read from the stamps: a gap of about k median periods means k - 1 lost ones.
    """

    def __init__(self, last: int = 150) -> None:
        self.count = 0
        self._stamps: collections.deque[Stamp] = collections.deque(maxlen=last)
        self._received: collections.deque[Stamp] = collections.deque(maxlen=last)
        self._ages: collections.deque[float] = collections.deque(maxlen=last)

    def add(self, stamp: Stamp, received: Stamp, age_ns: int) -> None:
        """Take a message: its stamp, when it came on the steady clock, its age, all in ns."""
        self.count += 1
        if self._stamps and stamp <= self._stamps[-1]:
            self._stamps.clear()
        self._stamps.append(stamp)
        self._received.append(received)
        self._ages.append(age_ns / 1e6)

    def silence(self, now: Stamp) -> float:
        """Return the seconds since the last one; infinite when none came."""
        return (now - self._received[-1]) / SECOND_NS if self._received else float('inf')

    def rate(self, now: Stamp) -> float:
        """Return the messages per second over the last five seconds."""
        recent = [stamp for stamp in self._received if now - stamp <= 5 * SECOND_NS]
        if len(recent) < 2:
            return 0.0
        return (len(recent) - 1) * SECOND_NS / max(recent[-1] - recent[0], 1)

    def loss(self) -> float:
        """Return the share, 0..1, of messages that the gaps between stamps tell of."""
        if len(self._stamps) < 60:
            return 0.0
        gaps = np.diff(np.array(self._stamps))
        lost = np.maximum(np.round(gaps / max(float(np.median(gaps)), 1.0)) - 1.0, 0.0)
        return float(lost.sum() / (lost.sum() + len(gaps)))

    def figures(self, now: Stamp) -> dict[str, float]:
        """Return rate, age, loss and silence for the diagnostics."""
        found = {'received': float(self.count), 'rate_hz': self.rate(now),
                 'lost_share': self.loss()}
        if self._ages:
            found['age_ms_p50'] = float(np.median(self._ages))
            found['silence_s'] = self.silence(now)
        return found
