# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""How fast: a gain that grows as the error shrinks, and a start from rest.

Gain. A loop is slow in the end because its speed is proportional to the error, and it is only in
the end that a higher gain costs no speed. With the error E in px and the knee K,

    gain(E) = far (1 + (boost - 1) / (1 + (E / K)^2)),

a schedule of our own: monotonic, between boost far at E = 0 and far at infinity, their mean at
E = K, and gain(E) E grows with E throughout when boost <= 9, so that more error never means less
speed (d/dE of gain(E) E has its least value far - far (boost - 1) / 8 at E = sqrt(3) K).

Start (task sequencing after Mansard & Chaumette 2007, from memory). A law switched on at rest
jumps to gain M e. Subtracting what it asked for in the first moment, faded out with exp(-rate t),

    xi(t) = xi_law(t) - xi_law(0) exp(-rate t),

starts at zero and leaves the law alone in the end. For a constant matrix it is e / e0 =
(rate exp(-gain t) - gain exp(-rate t)) / (rate - gain).
"""

from __future__ import annotations

import math
import typing

from servo_nodes.values import SECOND_NS, Floats, Stamp

LARGEST_RATIO = 9.0


class Gains(typing.Protocol):
    """Where the gains stand: `gain`, `gain_boost` and `gain_knee` of the settings."""

    @property
    def gain(self) -> float:
        """Return the gain of a large error, 1/s."""

    @property
    def gain_boost(self) -> float:
        """Return how many times that a small error gets."""

    @property
    def gain_knee(self) -> float:
        """Return the error half-way between, px."""


def gain_at(error_px: float, gains: Gains) -> float:
    """Return the gain, 1/s, for an error in px; see the module's head."""
    share = error_px / gains.gain_knee
    return gains.gain * (1.0 + (gains.gain_boost - 1.0) / (1.0 + share * share))


class SmoothStart:
    """Fades in whatever a law asks for, from the moment it is begun."""

    def __init__(self) -> None:
        self._began: Stamp | None = None
        self._first: Floats | None = None

    def begin(self, now: Stamp) -> None:
        """Start from rest at `now`, ns."""
        self._began, self._first = now, None

    def forget(self) -> None:
        """Leave the law alone."""
        self._began = self._first = None

    def applied(self, twist: Floats, now: Stamp, rate: float) -> Floats:
        """Return `twist` (6,) less the faded first one; the clock starts with the first twist."""
        if self._began is None:
            return twist
        if self._first is None:
            self._began, self._first = now, twist
        elapsed = (now - self._began) / SECOND_NS
        faded = math.exp(-rate * max(elapsed, 0.0))
        if faded < 1e-6:
            self.forget()
            return twist
        return twist - faded * self._first
