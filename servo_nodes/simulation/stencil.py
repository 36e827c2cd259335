# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Sprayed letters: strokes on a grid four wide and six high, cut by the bridges of a stencil."""

from __future__ import annotations

import numpy as np

from servo_nodes.simulation.canvas import Canvas, Colour, stroke
from servo_nodes.values import Floats

Path = tuple[tuple[float, float], ...]

# Paths from corner to corner; where one path ends and the next begins the stencil holds together.
GLYPHS: dict[str, tuple[Path, ...]] = {
    ' ': (),
    '2': (((0, 1.2), (1, 0), (3, 0), (4, 1), (4, 2.2), (2.4, 3.8)),
          ((1.9, 4.3), (0.2, 6), (4.4, 6))),
    '4': (((2.6, 0), (0, 4.2), (1.9, 4.2)), ((2.6, 4.2), (4.6, 4.2)), ((3.2, 1.9), (3.2, 3.6)),
          ((3.2, 4.8), (3.2, 6.4))),
    '7': (((-0.4, 0), (4, 0), (3.1, 2.4)), ((2.8, 3.1), (1.5, 6.4))),
    'A': (((0, 6.4), (1.55, 0.6)), ((2.05, -0.4), (4, 6.4)), ((1.3, 4.2), (2.7, 4.2))),
    'D': (((0.2, -0.4), (0.2, 6.4)),
          ((0.95, 0), (2.6, 0), (4, 1.4), (4, 4.6), (2.6, 6), (0.95, 6))),
    'N': (((0, 6.4), (0, -0.4)), ((0.7, 0.2), (3.3, 5.8)), ((4, 6.4), (4, -0.4))),
    'S': (((4, 1.1), (3.2, 0), (1, 0), (0, 1), (0, 2), (1, 2.9), (1.8, 2.9)),
          ((2.4, 2.9), (3, 2.9), (4, 3.8), (4, 5), (3, 6), (0.8, 6), (0, 4.9))),
}
_ADVANCE = 5.9
_WEIGHT = 0.98


def spray(canvas: Canvas, text: str, at: tuple[float, float], high: float, colour: Colour, *,
          worn: float) -> None:
    """Spray a text with its upper left corner `at`, m; `worn` as in `Canvas.fill`."""
    unit = high / 6
    for place, letter in enumerate(text):
        origin = np.array(at) + (place * _ADVANCE * unit + 0.4 * unit, 0.4 * unit)
        for path in GLYPHS[letter]:
            outline = _mitred(np.array(path)) * unit + origin
            canvas.fill([outline], colour, opacity=0.22, soft=0.22 * unit)
            canvas.fill([outline], colour, opacity=0.93, soft=0.0005, worn=worn)


def _mitred(path: Floats) -> Floats:
    """Return the outline of a stroke whose corners are mitred, so that its weight is even."""
    if len(path) == 2:
        return stroke(path, _WEIGHT)
    ahead = np.diff(path, axis=0)
    ahead /= np.linalg.norm(ahead, axis=1, keepdims=True)
    normal = np.stack([-ahead[:, 1], ahead[:, 0]], axis=-1)
    joint = np.concatenate([normal[:1], normal[:-1] + normal[1:], normal[-1:]])
    joint /= np.linalg.norm(joint, axis=1, keepdims=True)
    share = np.concatenate([[1.0], (joint[1:-1] * normal[1:]).sum(1), [1.0]])
    side = joint * (_WEIGHT / 2 / np.maximum(share, 0.4))[:, None]
    return np.concatenate([path + side, (path - side)[::-1]])
