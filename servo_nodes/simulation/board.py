# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A board of square markers, screwed to the skirt of the tram."""

from __future__ import annotations

import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.simulation import skirt
from servo_nodes.simulation.canvas import Canvas, box
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Floats

COLUMNS, ROWS = 4, 3
_SIDE = 0.66
_SHEET = (1.2, 0.96)


def drawn(rng: np.random.Generator, resolution: float, width: float, dictionary: str) -> Pixels:
    """Return the picture, uint8 BGR, of a board `width`, m, wide in the middle of the skirt.

    Raises
    ------
    ValueError
        For an unknown dictionary, or an OpenCV without markers.
    """
    modules = _modules(dictionary)
    around = Canvas(*_SHEET, 2 * resolution, rng)
    skirt.paint(around)
    canvas = around.refined()
    cell = width / COLUMNS
    edge = box(-width / 2, -ROWS * cell / 2, width / 2, ROWS * cell / 2, 0.06 * cell)
    canvas.shade([edge + 0.006], 0.45, soft=0.006)
    canvas.fill([edge], (226., 228., 228.))
    for number, corner in enumerate(_corners(cell)):
        _draw_marker(canvas, corner, _SIDE * cell, modules[number])
    for x, y in box(*edge.min(0) + 0.1 * cell, *edge.max(0) - 0.1 * cell):
        skirt.rivet(canvas, x, y, 0.03 * cell)
    canvas.write('TRAM DEPOT EAST  BOARD 1', (-0.6 * cell, ROWS * cell / 2 - 0.06 * cell),
                 1.2 * cell, (60, 60, 60))
    return canvas.pixels


def landmarks(width: float) -> Floats:
    """Return the corners (4 N, 3), m: of marker n, numbers 4 n.. clockwise from its upper left."""
    cell = width / COLUMNS
    side = _SIDE * cell
    flat = np.concatenate([corner + box(0, 0, side, side) for corner in _corners(cell)])
    return np.concatenate([flat, np.zeros((len(flat), 1))], axis=1)


def _corners(cell: float) -> list[Floats]:
    """Return each marker's upper left corner (2,), m."""
    inset = (1 - _SIDE) / 2
    return [np.array([(column + inset - COLUMNS / 2) * cell, (row + inset - ROWS / 2) * cell])
            for row in range(ROWS) for column in range(COLUMNS)]


def _draw_marker(canvas: Canvas, corner: Floats, side: float,
                 modules: npt.NDArray[np.bool_]) -> None:
    step = side / len(modules)
    canvas.fill([corner + box(0, 0, side, side)], (28., 26., 26.))
    for row, column in np.argwhere(modules):
        place = corner + step * np.array([column, row])
        canvas.fill([place + box(0, 0, step, step)], (226., 228., 228.))


def _modules(name: str) -> list[npt.NDArray[np.bool_]]:
    """Return which modules (n, n) of each marker are white, its black border included."""
    aruco: typing.Any = getattr(cv2, 'aruco', None)
    if aruco is None:
        raise ValueError('scene.kind: expected an OpenCV with its aruco module for markers, '
                         f'got {cv2.__version__}')
    number = getattr(aruco, name, None)
    if not name.startswith('DICT_') or not isinstance(number, int):
        raise ValueError(f'scene.dictionary: expected a name such as DICT_4X4_50, got {name!r}')
    dictionary = aruco.getPredefinedDictionary(number)
    draw = aruco.generateImageMarker if hasattr(aruco, 'generateImageMarker') else aruco.drawMarker
    size = dictionary.markerSize + 2
    return [np.asarray(draw(dictionary, n, size)) > 127 for n in range(COLUMNS * ROWS)]
