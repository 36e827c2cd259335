# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The painted skirt of the tram around the flap: two colours, seams, rivets, chips."""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.simulation.canvas import Canvas, blot, disc, stroke

_GREEN, _CREAM, _OCHRE = (70., 88., 34.), (186., 214., 222.), (38., 128., 196.)
_PRIMER, _RUST = (62., 74., 128.), (28., 58., 112.)
_SOOT, _BARE = (28., 30., 32.), (150., 146., 140.)
_CREAM_TO, _BAND = -0.2, (-0.192, -0.184)


def paint(canvas: Canvas) -> None:
    """Paint the whole sheet."""
    wide, high = np.multiply(canvas.size, canvas.resolution)
    tone = 0.93 + 0.16 * (canvas.clouds(0.3) - 0.5) + 0.02 * canvas.brushed(0.002)
    dirt = np.clip((canvas.clouds(0.008) - 0.95) * 14, 0, 1)
    y = (np.arange(canvas.size[1]) + 0.5) * canvas.resolution - high / 2
    colours = np.where((y < _CREAM_TO)[:, None], _CREAM, _GREEN)
    colours[(_BAND[0] <= y) & (y <= _BAND[1])] = _OCHRE
    splashed = 1 - 0.3 / (1 + np.exp((0.3 - y) / 0.04))
    canvas.cover((tone * (1 - 0.35 * dirt)).astype(np.float32),
                 (colours * splashed[:, None]).astype(np.float32)[:, None])
    _seams(canvas, wide, high)
    _chips(canvas, wide, high, 420)


def rivet(canvas: Canvas, x: float, y: float, radius: float = 0.0042) -> None:
    """Set a round rivet, lit from the upper left."""
    canvas.shade([disc(x + 0.3 * radius, y + 0.4 * radius, radius, 32)], 0.5, soft=0.25 * radius)
    canvas.shade([disc(x, y, radius, 32)], 1.3, soft=0.1 * radius)
    canvas.shade([disc(x + 0.15 * radius, y + 0.2 * radius, 0.75 * radius, 32)], 0.8,
                 soft=0.2 * radius)
    canvas.shade([disc(x - 0.3 * radius, y - 0.35 * radius, 0.3 * radius, 24)], 1.5,
                 soft=0.12 * radius)


def _seams(canvas: Canvas, wide: float, high: float) -> None:
    lines = [stroke([(x, -high), (x, 0.0), (x, high)], 0.004) for x in (-0.33, 0.345)]
    lines.append(stroke([(-wide, 0.235), (0, 0.235), (wide, 0.235)], 0.004))
    for line in lines:
        canvas.shade([line + (0.003, 0.003)], 1.25, soft=0.001)
        canvas.fill([line], _SOOT, opacity=0.85, soft=0.0006)
    for x in (-0.345, -0.315, 0.33, 0.36):
        for y in np.arange(-high / 2 + 0.02, high / 2, 0.04):
            rivet(canvas, x, y + 0.006 * math.sin(40 * x))
    for x in np.arange(-wide / 2 + 0.02, wide / 2, 0.045):
        rivet(canvas, x, 0.25)


def _chips(canvas: Canvas, wide: float, high: float, count: int) -> None:
    """Let paint come off: primer shows, and steel or rust in its middle."""
    rng = canvas.rng
    for x, y in rng.uniform((-wide / 2, -high / 2), (wide / 2, high / 2), (count, 2)):
        shape = blot(rng, x, y, 0.0016 + 0.011 * rng.power(0.35) ** 2)
        canvas.shade([shape + 0.0006], 0.6, soft=0.0006)
        canvas.fill([shape], _PRIMER)
        heart = (shape - (x, y)) * rng.uniform(0.5, 0.8) + (x, y)
        canvas.fill([heart], _RUST if rng.random() < 0.4 else _BARE)


