# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Boxes that stand out from the flap and the skirt: real parallax, real occlusion."""

from __future__ import annotations

import typing

import numpy as np

from servo_nodes.simulation import stencil
from servo_nodes.simulation.canvas import Canvas, Colour, blot, box
from servo_nodes.simulation.skirt import rivet
from servo_nodes.simulation.texture import Face, Texture
from servo_nodes.values import Floats

_RESOLUTION = 0.0005
_INSET = 0.009


class Block(typing.NamedTuple):
    """A box on the plane z = 0: its rectangle and height, m, paint, and the letters on it."""

    x0: float
    y0: float
    x1: float
    y1: float
    height: float
    paint: Colour
    letters: str


BLOCKS = (
    Block(-0.178, -0.128, -0.07, -0.078, 0.03, (52., 120., 206.), 'SAND'),
    Block(0.07, 0.012, 0.178, 0.078, 0.05, (96., 92., 90.), '42'),
    Block(-0.044, 0.012, 0.004, 0.072, 0.035, (40., 40., 168.), 'A'),
    Block(-0.31, 0.0, -0.224, 0.12, 0.07, (150., 128., 70.), 'D7'),
    Block(0.226, -0.14, 0.312, -0.01, 0.04, (60., 160., 196.), 'N2'),
    Block(-0.1, 0.168, 0.08, 0.222, 0.06, (70., 70., 72.), 'ANNA 7'),
)


def faces(rng: np.random.Generator) -> tuple[Face, ...]:
    """Return the five visible sides of every box."""
    return tuple(face for block in BLOCKS for face in _sides(block, rng))


def landmarks() -> Floats:
    """Return the screws (N, 3), m, on the boxes' tops."""
    tops = [np.column_stack([box(b.x0 + _INSET, b.y0 + _INSET, b.x1 - _INSET, b.y1 - _INSET),
                             np.full(4, -b.height)]) for b in BLOCKS]
    return np.concatenate(tops)


def _sides(block: Block, rng: np.random.Generator) -> list[Face]:
    wide, high, tall = block.x1 - block.x0, block.y1 - block.y0, block.height
    x, y = (block.x0 + block.x1) / 2, (block.y0 + block.y1) / 2
    right, down, away = np.eye(3)
    found = [Face(_top(block, wide, high, rng), _pose(right, down, (x, y, -tall)))]
    for inward, edge, light in ((right, block.x0, 0.8), (-right, block.x1, 0.4)):
        found.append(Face(_flank(block, tall, high, light, rng),
                          _pose(np.cross(down, inward), down, (edge, y, -tall / 2))))
    for inward, edge, light in ((down, block.y0, 0.9), (-down, block.y1, 0.3)):
        found.append(Face(_flank(block, wide, tall, light, rng),
                          _pose(right, np.cross(inward, right), (x, edge, -tall / 2))))
    return found


def _pose(right: Floats, down: Floats, middle: tuple[float, float, float]) -> Floats:
    """Return T_SF of a face whose picture has these axes."""
    pose = np.eye(4)
    pose[:3, 0], pose[:3, 1], pose[:3, 2], pose[:3, 3] = right, down, np.cross(right, down), middle
    return pose


def _top(block: Block, wide: float, high: float, rng: np.random.Generator) -> Texture:
    canvas = _painted(block, wide, high, 1.0, rng)
    x, y = wide / 2, high / 2
    rim = [box(-x, -y, x, y), box(-x + 0.0016, -y + 0.0016, x - 0.0016, y - 0.0016)]
    canvas.shade(rim, 1.35)
    letter = min(0.5 * high, 0.7 * wide / len(block.letters))
    across = len(block.letters) * letter * 0.95
    stencil.spray(canvas, block.letters, (-across / 2, -0.56 * letter), letter,
                  (216., 222., 224.), worn=0.12)
    for _ in range(22):
        spot = rng.uniform((-x, -y), (x, y))
        canvas.fill([blot(rng, spot[0], spot[1], rng.uniform(0.001, 0.004))], (64., 72., 84.))
    for spot in box(-x + _INSET, -y + _INSET, x - _INSET, y - _INSET):
        rivet(canvas, spot[0], spot[1])
    return Texture(canvas.pixels, wide, high)


def _flank(block: Block, wide: float, high: float, light: float,
           rng: np.random.Generator) -> Texture:
    return Texture(_painted(block, wide, high, light, rng).pixels, wide, high)


def _painted(block: Block, wide: float, high: float, light: float,
             rng: np.random.Generator) -> Canvas:
    canvas = Canvas(wide, high, _RESOLUTION, rng)
    tone = light * (0.9 + 0.25 * (canvas.clouds(0.03) - 0.5))
    canvas.cover(tone.astype(np.float32), np.array(block.paint, np.float32)[None, None])
    return canvas
