# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Carries stamps of the node's clock over to the steady clock, without changing their order."""

from __future__ import annotations

from servo_nodes.values import Stamp


class Timeline:
    """Translates stamps as they arrive.

    A stamp keeps its age: `steady = steady_now - (node_now - stamp)`. The two clocks are read
    one after the other, and the node's may be set, simulated or coarse, so the same stamp twice
    would come out as two; its order to the one before is therefore kept exactly.
    """

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        """Start anew, after the node's clock jumped."""
        self._last: tuple[Stamp, Stamp] | None = None

    def steady(self, stamp: Stamp, node_now: Stamp, steady_now: Stamp) -> Stamp:
        """Return `stamp`, ns, on the steady clock; zero stays zero: nobody stamped it."""
        if stamp == 0:
            return 0
        moved = steady_now - (node_now - stamp)
        if self._last is not None:
            last, last_moved = self._last
            if stamp == last:
                moved = last_moved
            elif stamp > last:
                moved = max(moved, last_moved + 1)
            else:
                moved = min(moved, last_moved - 1)
        self._last = stamp, moved
        return moved
