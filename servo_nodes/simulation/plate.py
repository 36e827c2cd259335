# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The filler flap of a tram's sand box, drawn from a Generator.

A scuffed steel plate in the painted skirt of a tram: eight bolts, a pull ring in its cup, a
square lock, louvres, a stencilled number, a hazard stripe, a maker's label; then rust, chips,
scratches and dirt. All sizes are metres, the origin is the middle of the plate.
"""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.simulation import skirt, stencil
from servo_nodes.simulation.canvas import Canvas, Field, blot, box, disc, stroke
from servo_nodes.simulation.skirt import rivet
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Floats

WIDE, HIGH = 1.2, 0.96
PLATE = (-0.2, -0.148, 0.2, 0.148)
BOLTS = tuple((x, y) for y in (-0.13, 0.13) for x in (-0.182, -0.062, 0.062, 0.182))
RING = (-0.112, -0.018)
LOCK = (-0.018, 0.045)
LABEL = (0.055, 0.03, 0.165, 0.072)
STRIPE = (-0.165, 0.085, 0.165, 0.117)

_STEEL = (186., 178., 172.)
_RUST = (28., 58., 112.)
_WHITE, _YELLOW, _BLACK = (214., 222., 226.), (24., 178., 232.), (34., 32., 32.)


def drawn(rng: np.random.Generator, resolution: float) -> Pixels:
    """Return the picture, uint8 BGR, `WIDE` x `HIGH` m at `resolution` m per pixel."""
    around = Canvas(WIDE, HIGH, 2 * resolution, rng)
    skirt.paint(around)
    sheet = around.refined()
    canvas = sheet.middle(0.48, 0.46)
    steel = _steel(canvas)
    _plate(canvas, steel)
    _stripe(canvas)
    stencil.spray(canvas, '274', (0.002, -0.056), 0.064, _WHITE, worn=0.13)
    stencil.spray(canvas, 'SAND', (0.002, -0.102), 0.026, _WHITE, worn=0.1)
    _arrow(canvas)
    _louvres(canvas)
    _scratches(canvas)
    _ring(canvas, steel)
    _lock(canvas)
    _label(canvas, steel)
    for x, y in BOLTS:
        _bolt(canvas, steel, x, y, 0.0092)
    _dirt(canvas)
    return sheet.pixels


def landmarks() -> Floats:
    """Return places (N, 3), m, that the eye finds again: bolts, ring, lock, label, stripe."""
    corners = [box(*LABEL), box(*STRIPE), box(*PLATE) * 0.96]
    flat = np.concatenate([np.array(BOLTS), [RING, LOCK], *corners,
                           disc(*RING, 0.046, 6), [(0.006, -0.062), (0.16, 0.016)]])
    return np.concatenate([flat, np.zeros((len(flat), 1))], axis=1)


def _steel(canvas: Canvas) -> Field:
    """Return the brightness of scuffed steel over the whole sheet, about 0.4..1.1."""
    grain: Field = (0.76 + 0.045 * canvas.brushed(0.03) + 0.24 * (canvas.clouds(0.25) - 0.5)
                    + 0.16 * (canvas.clouds(0.03) - 0.5)).astype(np.float32)
    return grain


def _plate(canvas: Canvas, steel: Field) -> None:
    x0, y0, x1, y1 = PLATE
    frame = box(x0 - 0.013, y0 - 0.013, x1 + 0.013, y1 + 0.013, 0.03)
    canvas.shade([frame + (0.006, 0.009)], 0.45, soft=0.007)
    canvas.fill([frame], (44., 44., 42.))
    canvas.fill([frame, box(x0 - 0.009, y0 - 0.009, x1 + 0.009, y1 + 0.009, 0.027)],
                (92., 90., 86.), opacity=0.7, soft=0.0008)
    whole = box(*PLATE, 0.02)
    canvas.lay([whole], steel, _STEEL)
    inner = box(x0 + 0.003, y0 + 0.003, x1 - 0.003, y1 - 0.003, 0.018)
    canvas.shade([whole, inner], 1.22, soft=0.0006)
    canvas.shade([whole, whole - (0.0022, 0.0026)], 0.7, soft=0.0007)
    pressed = [box(x0 + 0.006, y0 + 0.034, x1 - 0.006, y1 - 0.034, 0.012),
               box(x0 + 0.0075, y0 + 0.0355, x1 - 0.0075, y1 - 0.0355, 0.0105)]
    canvas.shade(pressed, 0.62, soft=0.0005)
    canvas.shade([outline + 0.0011 for outline in pressed], 1.2, soft=0.0005)


def _stripe(canvas: Canvas) -> None:
    x0, y0, x1, y1 = STRIPE
    canvas.fill([box(*STRIPE)], _YELLOW, worn=0.15)
    high, pitch = y1 - y0, 0.0424
    lean = high
    for left in np.arange(x0 - lean, x1, pitch):
        bar = np.array([(left + lean, y0), (left + lean + pitch / 2, y0),
                        (left + pitch / 2, y1), (left, y1)])
        bar[:, 0] = np.clip(bar[:, 0], x0, x1)
        canvas.fill([bar], _BLACK, worn=0.13)


def _arrow(canvas: Canvas) -> None:
    head = np.array([(0.118, -0.104), (0.152, -0.104), (0.152, -0.112), (0.17, -0.091),
                     (0.152, -0.07), (0.152, -0.078), (0.118, -0.078)])
    canvas.fill([head], _WHITE, opacity=0.9, worn=0.08, soft=0.0004)
    canvas.fill([box(0.132, -0.107, 0.1345, -0.075)], (120., 116., 112.))


def _louvres(canvas: Canvas) -> None:
    for row in range(3):
        y = 0.044 + 0.0135 * row
        slot = box(-0.168, y, -0.066, y + 0.006, 0.003)
        canvas.shade([slot + (0, 0.0022)], 1.3, soft=0.0006)
        canvas.fill([slot], (26., 26., 26.), soft=0.0003)
        canvas.shade([slot - (0, 0.0028)], 0.72, soft=0.0008)


def _ring(canvas: Canvas, steel: Field) -> None:
    x, y = RING
    cup = disc(x, y, 0.046)
    canvas.shade([disc(x, y, 0.0485)], 1.18, soft=0.001)
    canvas.lay([cup], steel, (104., 100., 96.))
    canvas.shade([cup, disc(x + 0.007, y + 0.009, 0.0425)], 0.35, soft=0.004)
    canvas.shade([disc(x + 0.012, y + 0.016, 0.022)], 1.25, soft=0.01)
    across, within, low = 0.0365, 0.0275, y + 0.004
    torus = [disc(x, low, across), disc(x, low, within)]
    canvas.shade([outline + (0.004, 0.006) for outline in torus], 0.4, soft=0.0025)
    canvas.lay(torus, steel, (206., 200., 196.))
    for inner, outer, factor in ((0.0275, 0.0293, 0.55), (0.0345, 0.0365, 0.5),
                                 (0.0312, 0.0328, 1.3)):
        canvas.shade([disc(x, low, outer), disc(x, low, inner)], factor, soft=0.0008)
    canvas.shade([disc(x - 0.02, low - 0.025, 0.014)], 1.15, soft=0.006)
    lug = box(x - 0.0115, y - 0.044, x + 0.0115, y - 0.0215, 0.003)
    canvas.shade([lug + (0.002, 0.003)], 0.45, soft=0.0015)
    canvas.lay([lug], steel, (170., 164., 158.))
    canvas.shade([lug, lug + (0.001, 0.0012)], 1.35, soft=0.0004)
    for side in (-0.0065, 0.0065):
        rivet(canvas, x + side, y - 0.037, 0.0026)


def _lock(canvas: Canvas) -> None:
    x, y = LOCK
    canvas.shade([disc(x + 0.0015, y + 0.002, 0.0185)], 0.5, soft=0.0015)
    canvas.fill([disc(x, y, 0.018)], (112., 150., 172.))
    canvas.shade([disc(x - 0.006, y - 0.007, 0.008)], 1.3, soft=0.005)
    canvas.shade([disc(x, y, 0.018), disc(x - 0.0008, y - 0.001, 0.0168)], 0.6, soft=0.0006)
    canvas.shade([disc(x, y, 0.0125), disc(x, y, 0.0115)], 0.55, soft=0.0003)
    canvas.fill([disc(x, y, 0.0092, 4, turn=0.35)], (20., 20., 22.))
    canvas.fill([box(x - 0.0012, y - 0.0175, x + 0.0012, y - 0.0125)], (40., 40., 190.))
    canvas.write('SHUT', (x - 0.0085, y - 0.022), 0.017, (40, 40, 44))
    canvas.write('OPEN', (x + 0.021, y + 0.003), 0.019, (40, 40, 44))


def _label(canvas: Canvas, steel: Field) -> None:
    x0, y0, x1, y1 = LABEL
    plate = box(*LABEL, 0.003)
    canvas.shade([plate + (0.001, 0.0014)], 0.5, soft=0.001)
    canvas.lay([plate], 0.5 + 0.5 * steel, (222., 222., 218.))
    canvas.fill([box(x0 + 0.002, y0 + 0.002, x1 - 0.002, y0 + 0.0125)], (112., 52., 24.))
    canvas.write('TRAM DEPOT EAST', (x0 + 0.008, y0 + 0.0098), 0.066, (226, 226, 224))
    for row, (text, wide) in enumerate((('SAND BOX  A2 / LH', 0.054),
                                        ('DRY SAND 0.8-1.2 mm', 0.064), ('MAX 48 kg', 0.032))):
        canvas.write(text, (x0 + 0.006, y0 + 0.0205 + 0.0078 * row), wide, (44, 40, 40))
    x = x0 + 0.076
    while x < x1 - 0.008:
        bar = float(canvas.rng.choice((0.0008, 0.0012, 0.002)))
        canvas.fill([box(x, y0 + 0.0225, x + bar, y1 - 0.004)], _BLACK)
        x += bar + float(canvas.rng.choice((0.0009, 0.0014, 0.0022)))
    for side_x in (x0 + 0.004, x1 - 0.004):
        rivet(canvas, side_x, y0 + 0.0072, 0.0018)


def _bolt(canvas: Canvas, steel: Field, x: float, y: float, radius: float) -> None:
    turn = canvas.rng.uniform(0, math.pi)
    canvas.fill([blot(canvas.rng, x, y, 2.4 * radius, 17)], _RUST, opacity=0.3, soft=0.004)
    canvas.shade([disc(x + 0.0018, y + 0.0024, 1.5 * radius)], 0.35, soft=0.0015)
    canvas.lay([disc(x, y, 1.45 * radius)], steel, (142., 138., 134.))
    canvas.shade([disc(x, y, 1.45 * radius), disc(x + 0.0006, y + 0.0008, 1.34 * radius)], 1.4)
    hexagon = disc(x, y, radius, 6, turn)
    canvas.shade([hexagon + (0.0018, 0.0024)], 0.3, soft=0.001)
    canvas.lay([hexagon], steel, (186., 180., 176.))
    for side in range(6):
        normal = turn + (side + 0.5) * math.pi / 3
        facing = -(0.6 * math.cos(normal) + 0.8 * math.sin(normal))
        wedge = np.array([hexagon[side], hexagon[(side + 1) % 6], (x, y)])
        canvas.shade([wedge], 1 + 0.5 * facing)
    canvas.lay([disc(x, y, 0.7 * radius)], steel, (214., 208., 204.))
    canvas.shade([disc(x, y, 0.7 * radius), disc(x - 0.0005, y - 0.0006, 0.62 * radius)], 0.7)


def _scratches(canvas: Canvas) -> None:
    """Scratch the plate: bright lines with a dark side, from tools, and round the ring."""
    rng = canvas.rng
    for _ in range(190):
        start = rng.uniform((PLATE[0], PLATE[1]), (PLATE[2], PLATE[3]))
        angle, length = rng.normal(0.35, 0.6), 0.005 + 0.06 * rng.power(0.35)
        bend = rng.normal(0, 0.12)
        along = np.linspace(0, 1, 9)
        heading = angle + bend * along
        path = start + np.cumsum(
            np.stack([np.cos(heading), np.sin(heading)], axis=-1) * length / 8, axis=0)
        path = np.clip(path, (PLATE[0] + 0.003, PLATE[1] + 0.003),
                       (PLATE[2] - 0.003, PLATE[3] - 0.003))
        _scratch(canvas, path, rng.uniform(0.0003, 0.0009))
    for _ in range(14):
        radius, middle = rng.uniform(0.049, 0.058), rng.normal(math.pi / 2, 0.7)
        arc = np.linspace(middle - 0.35, middle + 0.35, 16)
        _scratch(canvas, np.stack([RING[0] + radius * np.cos(arc),
                                   RING[1] + radius * np.sin(arc)], axis=-1), 0.0008)


def _scratch(canvas: Canvas, path: Floats, width: float) -> None:
    canvas.shade([stroke(path + 0.6 * width, width, tapered=True)], 0.7, soft=0.0002)
    canvas.fill([stroke(path, width, tapered=True)], (222., 218., 214.),
                opacity=canvas.rng.uniform(0.25, 0.8), soft=0.0002)


def _dirt(canvas: Canvas) -> None:
    """Let rust creep in from the edge of the plate and dirt run down below bolts and slots."""
    x0, y0, x1, y1 = PLATE
    edge = (canvas.inside([box(*PLATE, 0.02)], 0.0006)
            - canvas.inside([box(x0 + 0.012, y0 + 0.012, x1 - 0.012, y1 - 0.012, 0.01)], 0.007))
    patches = np.clip((canvas.clouds(0.02) - 0.62) * 5, 0, 1)
    canvas.stain((0.75 * np.clip(edge, 0, 1) * patches).astype(np.float32), _RUST)
    specks = np.clip((canvas.clouds(0.008) - 0.95) * 14, 0, 1)
    canvas.stain((0.5 * specks).astype(np.float32), (40., 52., 70.))
    for x, y in BOLTS:
        run = canvas.rng.uniform(0.02, 0.07)
        tail = np.array([(x - 0.004, y), (x + 0.004, y), (x + 0.0015, y + run),
                         (x - 0.0015, y + run)])
        canvas.fill([tail], (36., 56., 84.), opacity=0.28, soft=0.002)
