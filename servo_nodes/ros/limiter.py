# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Says a repeated thing seldom, keyed by what it is about, and counts what it kept back."""

from __future__ import annotations

import time
from collections.abc import Callable

from servo_nodes.values import SECOND_NS


class Limiter:
    """Lets one message per key through in each period of the steady clock.

    The middleware's own throttle inspects the stack at every suppressed call, forgets how much it
    suppressed, and is keyed by the place in the code rather than by the fault.

    Parameters
    ----------
    period : float, s, silence after a message of the same key
    clock : function that returns steady nanoseconds
    """

    def __init__(self, period: float = 5.0, clock: Callable[[], int] = time.monotonic_ns) -> None:
        self._period_ns = round(period * SECOND_NS)
        self._clock = clock
        self._said: dict[str, int] = {}
        self._kept: dict[str, int] = {}

    def passed(self, key: str, text: str) -> str | None:
        """Return the text to say, with the count of those kept back since, or None: keep it."""
        now = self._clock()
        said = self._said.get(key)
        if said is not None and now - said < self._period_ns:
            self._kept[key] = self._kept.get(key, 0) + 1
            return None
        self._said[key] = now
        kept = self._kept.pop(key, 0)
        return f'{text} ({kept} more like this were not shown)' if kept else text
