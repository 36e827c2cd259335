# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Is this an image at all? Black, white, without contrast, or the same one again and again.

A camera's noise makes two equal images impossible: pixels that stay for half a second under new
stamps come from a driver that repeats itself, while the arm may be moving.
"""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import SECOND_NS, Stamp

BLACK_LEVEL, WHITE_LEVEL = 12, 245
FROZEN_NS = SECOND_NS // 2
_FROZEN_COUNT = 4
_LEAST_CONTRAST = 2.5
_EDGE_SHARE = 0.01
_STEP_PX = 8
_LEVELS = np.arange(256.0)


class Health:
    """Remembers the last image just enough to tell when it does not change."""

    def __init__(self) -> None:
        self._last: Grey | None = None
        self._since: Stamp = 0
        self._count = 0
        self.brightness = 0.0

    def fault(self, grey: Grey, stamp: Stamp, *, frozen_stops: bool) -> str:
        """Return what is wrong with an image, in words, or nothing."""
        sample = np.ascontiguousarray(grey[::_STEP_PX, ::_STEP_PX])
        counts = np.bincount(sample.ravel(), minlength=256)
        self.brightness = float(counts @ _LEVELS) / sample.size
        contrast = math.sqrt(float(counts @ (_LEVELS - self.brightness) ** 2) / sample.size)
        below = np.cumsum(counts)
        edge = _EDGE_SHARE * sample.size
        low, high = (int(np.searchsorted(below, at)) for at in (edge, sample.size - edge))
        frozen = self._frozen_for(sample, stamp)
        if high < BLACK_LEVEL:
            return f'image is black (brightest {high} of 255): lens cap, light or exposure'
        if low > WHITE_LEVEL:
            return f'image is white (darkest {low} of 255): light or exposure'
        if contrast < _LEAST_CONTRAST:
            return f'image has no contrast (all near {low} of 255): covered lens, or fog'
        if frozen_stops and frozen >= FROZEN_NS and self._count >= _FROZEN_COUNT:
            return (f'image is frozen: the same pixels for {frozen / SECOND_NS:.1f} s under new '
                    'stamps; restart the camera driver')
        return ''

    def _frozen_for(self, sample: Grey, stamp: Stamp) -> Stamp:
        same = self._last is not None and np.array_equal(sample, self._last)
        if not same or stamp < self._since:
            self._last, self._since, self._count = sample, stamp, 0
        self._count += 1
        return stamp - self._since
