# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The leash: how far the commands have taken the camera from where it was engaged.

The way is the distance from there, by exact integration. The turn is the length of the integral
of the turn rate: unlike an angle it does not wrap after half a turn, and unlike the sum of all turns
it does not grow with the noise of a loop at its goal.
"""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.control.prediction import rigid
from servo_nodes.values import Floats


class Leash:
    """Integrates the twists that were sent, exactly, from the moment of engaging."""

    def __init__(self) -> None:
        self.restart()

    def restart(self) -> None:
        """Tie the leash here."""
        self._pose: Floats = np.eye(4)
        self._turn: Floats = np.zeros(3)
        self.travelled = 0.0
        self.turned = 0.0

    def add(self, twist: Floats, duration: float) -> None:
        """Move by `twist` (6,), camera in its optical frame, held for `duration` s."""
        pose = self._pose = self._pose @ rigid(twist.tolist(), duration)
        x, y, z = pose[:3, 3].tolist()
        self.travelled = math.hypot(x, y, z)
        self._turn = self._turn + duration * twist[3:]
        self.turned = math.hypot(*self._turn.tolist())
