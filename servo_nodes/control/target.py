# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A target that drifts: its velocity, from what the camera's own motion does not explain.

A proportional law follows a target that drifts at the image rate r with the lasting error r /
gain. From one view to the next the points move as the camera's own motion says, plus what the
target did; fitted by the interaction matrix that remainder is a displacement of six numbers.
Summed up it is the position that a constant-velocity filter follows, with the steady gains that
belong to its tracking index

    Lambda = sigma_w T^2 / sigma_v,   r = (4 + Lambda - sqrt(8 Lambda + Lambda^2)) / 4,
    alpha = 1 - r^2,   beta = 2 (2 - alpha) - 4 sqrt(1 - alpha)

(Kalata 1984, from memory): a small index trusts the past, a large one the last view. The velocity
that comes out is the twist with which the camera would have to move to see the target at rest.
"""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.values import Floats


def gains(index: float) -> tuple[float, float]:
    """Return (alpha, beta) of a tracking index."""
    r = (4 + index - math.sqrt(8 * index + index * index)) / 4
    alpha = 1 - r * r
    return alpha, 2 * (2 - alpha) - 4 * math.sqrt(1 - alpha)


class Drift:
    """Follows the velocity (6,) of the target, as the twist that would cancel it."""

    def __init__(self) -> None:
        self._offset = np.zeros(6)
        self.twist: Floats = np.zeros(6)

    def clear(self) -> None:
        """Take the target to be at rest."""
        self._offset = np.zeros(6)
        self.twist = np.zeros(6)

    def update(self, displacement: Floats, duration: float, *, index: float) -> None:
        """Take in what the camera's own motion did not explain.

        Parameters
        ----------
        displacement : (6,), m and rad, that the camera would have had to move as well
        duration : float, s, in which it arose
        index : float, Lambda of the module's head
        """
        alpha, beta = gains(index)
        innovation = self._offset + displacement - self.twist * duration
        self._offset = (1 - alpha) * innovation
        self.twist = self.twist + beta / duration * innovation
