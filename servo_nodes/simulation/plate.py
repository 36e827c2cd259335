# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The filler flap of a tram's sand box, drawn from a Generator."""

from __future__ import annotations

import cv2
import numpy as np

from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Floats


def drawn(rng: np.random.Generator, resolution: float) -> Pixels:
    """Return the picture, uint8 BGR."""
    wide, high = round(1.2 / resolution), round(0.96 / resolution)
    small = rng.integers(70, 200, (high // 40, wide // 40, 3), dtype=np.uint8)
    picture = cv2.resize(small, (wide, high), interpolation=cv2.INTER_CUBIC)
    for _ in range(700):
        corner = rng.uniform((0, 0), (wide, high))
        size = rng.uniform(15, 70, 2)
        box = cv2.boxPoints((tuple(corner), tuple(size), rng.uniform(0, 90)))
        cv2.fillConvexPoly(picture, np.round(box * 16).astype(np.int32),
                           rng.integers(20, 235, 3).tolist(), cv2.LINE_AA, 4)
    return picture


def landmarks() -> Floats:
    """Return places (N, 3), m, of the plate that a tracker would find."""
    x, y = np.meshgrid(np.linspace(-0.16, 0.16, 5), np.linspace(-0.12, 0.12, 4))
    return np.stack([x.ravel(), y.ravel(), np.zeros(x.size)], axis=-1)
