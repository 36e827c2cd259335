# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Is this an image at all? Black, white, without contrast, or the same one again and again.

A camera's noise makes two equal images impossible: pixels that stay for half a second under new
stamps come from a driver that repeats itself, while the arm may be moving.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import SECOND_NS, Stamp

BLACK_LEVEL, WHITE_LEVEL = 12, 250
FROZEN_NS = SECOND_NS // 2
_FROZEN_COUNT = 4
_LEAST_CONTRAST = 2.5
_EDGE_SHARE = 0.01
_STEP_PX = 4


class Health:
    """Remembers the last image just enough to tell when it does not change."""

    def __init__(self) -> None:
        self._last: npt.NDArray[np.uint8] | None = None
        self._since: Stamp = 0
        self._count = 0
        self.brightness = 0.0

    def fault(self, grey: Grey, stamp: Stamp, *, frozen_stops: bool) -> str:
        """Return what is wrong with an image, in words, or nothing."""
        sample = np.ascontiguousarray(grey[::_STEP_PX, ::_STEP_PX])
        self.brightness = float(sample.mean())
        frozen = self._frozen_for(sample, stamp)
        low, high = _percentiles(sample)
        if high < BLACK_LEVEL:
            return f'image is black (brightest {high} of 255): lens cap, light or exposure'
        if low > WHITE_LEVEL:
            return f'image is white (darkest {low} of 255): light or exposure'
        if float(sample.std()) < _LEAST_CONTRAST:
            return f'image has no contrast (all near {low} of 255): covered lens, or fog'
        if frozen_stops and frozen >= FROZEN_NS and self._count >= _FROZEN_COUNT:
            return (f'image is frozen: the same pixels for {frozen / SECOND_NS:.1f} s under new '
                    'stamps; restart the camera driver')
        return ''

    def _frozen_for(self, sample: npt.NDArray[np.uint8], stamp: Stamp) -> Stamp:
        if self._last is None or not np.array_equal(sample, self._last) or stamp < self._since:
            self._last, self._since, self._count = sample, stamp, 0
        self._count += 1
        return stamp - self._since


def _percentiles(sample: npt.NDArray[np.uint8]) -> tuple[int, int]:
    """Return the levels below and above which a hundredth of the pixels lie."""
    counts = np.cumsum(np.bincount(sample.ravel(), minlength=256))
    edge = _EDGE_SHARE * sample.size
    return int(np.searchsorted(counts, edge)), int(np.searchsorted(counts, sample.size - edge))
