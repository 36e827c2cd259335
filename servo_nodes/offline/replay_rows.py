# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Numbers of a run of any length in bounded memory: thinned rows, and counts in narrow bins."""

from __future__ import annotations

import array
import math
import typing

import numpy as np
import numpy.typing as npt

from servo_nodes.report.record import Series
from servo_nodes.values import Stamp

MOST_ROWS = 65536


class Rows:
    """Numbers over time; of too many rows every second goes, the marked ones stay."""

    def __init__(self, unit: str, *labels: str, most: int = MOST_ROWS) -> None:
        self.unit, self.labels, self._most = unit, labels, most
        self._times, self._values = array.array('q'), array.array('d')
        self._marks, self._numbers = array.array('b'), array.array('q')
        self._stride, self._next = 1, 0

    def add(self, time: Stamp, values: typing.Iterable[float], *, mark: bool = False) -> None:
        """Add a row; `mark` keeps it for good."""
        number, self._next = self._next, self._next + 1
        if number % self._stride and not mark:
            return
        self._times.append(time)
        self._values.extend(values)
        self._marks.append(mark)
        self._numbers.append(number)
        if len(self._times) >= self._most:
            self._thin()

    def series(self) -> Series:
        """Return what is left, as the page shows it."""
        times = np.array(self._times, np.int64)
        return Series(self.unit, self.labels, times,
                      np.array(self._values, np.float64).reshape(len(times), len(self.labels)))

    def __len__(self) -> int:
        return len(self._times)

    def _thin(self) -> None:
        self._stride *= 2
        kept = (np.array(self._numbers) % self._stride == 0) | (np.array(self._marks) != 0)
        if np.count_nonzero(kept) > 0.9 * self._most:
            kept = np.array(self._numbers) % self._stride == 0
        rows = np.array(self._values).reshape(-1, len(self.labels))[kept]
        self._times = array.array('q', np.array(self._times, np.int64)[kept].tobytes())
        self._values = array.array('d', rows.tobytes())
        self._marks = array.array('b', np.array(self._marks, np.int8)[kept].tobytes())
        self._numbers = array.array('q', np.array(self._numbers, np.int64)[kept].tobytes())


class Spread:
    """Counts of non-negative numbers in bins that are 1 % wide; the largest is exact."""

    LEAST, DECADES, PER_DECADE = 1e-7, 12, 232

    def __init__(self) -> None:
        self._bins: npt.NDArray[np.int64] = np.zeros(self.DECADES * self.PER_DECADE + 1, np.int64)
        self.most = 0.0
        self.count = 0

    def add(self, value: float) -> None:
        """Count a number; a NaN counts as infinite."""
        self.count += 1
        self.most = max(self.most, value) if value == value else math.inf
        if value > self.LEAST:
            place = self.PER_DECADE * math.log10(value / self.LEAST) if value < 1e4 else math.inf
            self._bins[int(min(place + 1, len(self._bins) - 1))] += 1
        else:
            self._bins[0 if value == value else -1] += 1

    def quantile(self, share: float) -> float:
        """Return the number below which a share of all lies, not less than it; NaN for none."""
        if not self.count:
            return math.nan
        place = int(np.searchsorted(np.cumsum(self._bins), share * self.count))
        if place == 0:
            return min(self.most, self.LEAST) if self.most > 0.0 else 0.0
        return min(self.most, float(self.LEAST * 10.0 ** (place / self.PER_DECADE)))
