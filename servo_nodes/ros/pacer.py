# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A thread that ticks at a fixed rate of the steady clock, whatever the executor is busy with."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable

from servo_nodes.values import SECOND_NS, Stamp


def raise_priority(by: int) -> str:
    """Lower the niceness of every thread of this process; return why not, or nothing."""
    if by == 0:
        return ''
    try:
        for thread in os.listdir('/proc/self/task'):
            os.setpriority(os.PRIO_PROCESS, int(thread), -by)
    except OSError as error:
        return (f'priority {by}: expected the right to lower the niceness, got '
                f'{error.strerror}; grant it (nice in limits.conf) or set priority to 0')
    return ''


class Pacer(threading.Thread):
    """Calls `tick(now, late)` every period, both in steady ns; missed ticks are not made up for.

    Parameters
    ----------
    rate : float, Hz
    tick : function of the time and of how late it is
    failed : function that is told of an exception, which ends the thread
    """

    def __init__(self, rate: float, tick: Callable[[Stamp, int], None],
                 failed: Callable[[BaseException], None], name: str = 'pacer') -> None:
        super().__init__(name=name, daemon=True)
        self.period_ns = round(SECOND_NS / rate)
        self._tick, self._failed = tick, failed
        self._ended = False

    def end(self, timeout: float = 0.3) -> None:
        """Stop ticking; when this returns, no tick is under way, or it hangs."""
        self._ended = True
        if self.is_alive() and threading.current_thread() is not self:
            self.join(timeout)

    def run(self) -> None:
        """Tick until the end."""
        due = time.monotonic_ns()
        try:
            while not self._ended:
                now = time.monotonic_ns()
                if now < due:
                    time.sleep((due - now) / SECOND_NS)
                    now = time.monotonic_ns()
                    if self._ended:
                        return
                self._tick(now, now - due)
                due = due + self.period_ns if now - due < self.period_ns else now + self.period_ns
        except Exception as error:
            self._failed(error)
