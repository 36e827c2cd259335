# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The leash: how far the commands have taken the camera from where it was engaged.

The way is the distance from there. Twists are added up until they matter and only then composed
as rigid motions, which is exact for a constant twist and cheap for any. The turn is the length of
the integral of the turn rate: unlike an angle it does not wrap after half a turn, and unlike the
sum of all turns it does not grow with the noise of a loop at its goal.
"""

from __future__ import annotations

import math
import typing

import numpy as np

from servo_nodes.control.prediction import rigid
from servo_nodes.values import Floats

PENDING_WAY = 0.01
PENDING_TURN = 0.05


class Leash:
    """Integrates the twists that were sent, from the moment of engaging."""

    def __init__(self) -> None:
        self.restart()

    def restart(self) -> None:
        """Tie the leash here."""
        self._pose: Floats = np.eye(4)
        self._pending = [0.0] * 6
        self._turn = [0.0] * 3
        self._way = 0.0
        self.travelled = 0.0
        self.turned = 0.0

    def add(self, twist: typing.Sequence[float], duration: float) -> None:
        """Move by `twist` (6 numbers), camera in its optical frame, held for `duration` s."""
        step = [duration * part for part in twist]
        pending = self._pending = [a + b for a, b in zip(self._pending, step, strict=True)]
        self._turn = [a + b for a, b in zip(self._turn, step[3:], strict=True)]
        self.turned = math.hypot(*self._turn)
        way = math.hypot(*pending[:3])
        if way > PENDING_WAY or math.hypot(*pending[3:]) > PENDING_TURN:
            self._pose = self._pose @ rigid(pending, 1.0)
            self._way = math.hypot(*self._pose[:3, 3].tolist())
            self._pending, way = [0.0] * 6, 0.0
        self.travelled = self._way + way
