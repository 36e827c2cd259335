# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Draw the camera's way in space: three projections and a view in perspective.

Everything is in the frame the camera had when it was taught: x right, y down, z forward, mm; home
is the origin.
"""

from __future__ import annotations

import math
import typing

import numpy as np

from servo_nodes import motion
from servo_nodes.report import palette
from servo_nodes.report.drawing import Drawing, pyplot_style, saved
from servo_nodes.report.record import Record
from servo_nodes.values import Floats

_SIDES = (('seen from above', 0, 2, 'right', 'forward'),
          ('seen from the side', 2, 1, 'forward', 'down'),
          ('seen from behind', 0, 1, 'right', 'down'))
_FRUSTA = 7
_ELEVATION_DEG = 22.0


def draw_camera(record: Record) -> Drawing | None:
    """Draw the true way of the camera; None when the record does not know it."""
    series = record.series.get('offset')
    if series is None or len(series.times) < 2:
        return None
    places = 1000 * series.values[:, :3]
    turns = series.values[:, 3:]
    picked = _evenly(places, turns)
    with pyplot_style() as make:
        figure = make(figsize=(9.2, 5.0), layout='constrained')
        grid = figure.add_gridspec(2, 3, width_ratios=(1, 1, 1.7))
        for cell, side in zip((grid[0, 0], grid[0, 1], grid[1, 0]), _SIDES, strict=True):
            _draw_side(figure.add_subplot(cell), places, turns, picked, side)
        _draw_space(figure.add_subplot(grid[:, 2], projection='3d'), places, turns, picked)
        _draw_key(figure.add_subplot(grid[1, 1]))
        media, data = saved(figure)
    return Drawing('camera', 'The way of the camera in space', 'True poses, relative to where the '
                   'camera was taught, which the controller never sees. Mm.', media, data)


def _evenly(places: Floats, turns: Floats) -> list[int]:
    """Return indices of a few poses, evenly spread over the way (1 rad counts 300 mm)."""
    steps = np.linalg.norm(np.diff(np.hstack([places, 300 * turns]), axis=0), axis=1)
    way = np.concatenate([[0.0], np.cumsum(steps)])
    marks = np.linspace(0, way[-1], _FRUSTA)
    return sorted({int(index) for index in np.searchsorted(way, marks).clip(0, len(way) - 1)})


def _cube(places: Floats) -> tuple[Floats, float]:
    """Return middle (3,) and half side, mm, of a cube around the way and home."""
    all_places = np.vstack([places, np.zeros(3)])
    low, high = all_places.min(axis=0), all_places.max(axis=0)
    return (low + high) / 2, max(5.0, 0.62 * float((high - low).max()))


def _draw_side(axis: typing.Any, places: Floats, turns: Floats, picked: list[int],
               side: tuple[str, int, int, str, str]) -> None:
    title, across, up, label_across, label_up = side
    middle, half = _cube(places)
    axis.set_aspect('equal')
    axis.set(xlim=(middle[across] - half, middle[across] + half),
             ylim=(middle[up] - half, middle[up] + half))
    axis.set_xlabel(f'{label_across}, mm')
    axis.set_ylabel(f'{label_up}, mm')
    axis.set_title(title, fontsize=8.5, loc='left', color=palette.SOFT)
    if label_up == 'down':
        axis.invert_yaxis()
    axes = motion.rotation_from_vector(turns[picked])
    for place, rotation in zip(places[picked], axes, strict=True):
        for column, colour in zip((0, 1, 2), palette.AXES, strict=True):
            tip = place + 0.16 * half * rotation[:, column]
            axis.plot([place[across], tip[across]], [place[up], tip[up]], color=colour,
                      linewidth=1)
    _draw_way(axis, places[:, across], places[:, up])


def _draw_way(axis: typing.Any, *columns: Floats) -> None:
    """Draw the way with a ring at its start, a dot at its end, and a diamond at home."""
    rim = {'markeredgecolor': palette.INK, 'linestyle': 'none'}
    axis.plot(*columns, color=palette.INK, linewidth=1.8)
    axis.plot(*(column[:1] for column in columns), 'o', markersize=6,
              markerfacecolor=palette.PAPER, **rim)
    axis.plot(*([0.0] for _ in columns), 'D', markersize=10, markerfacecolor='none',
              markeredgewidth=2, markeredgecolor=palette.GOAL)
    axis.plot(*(column[-1:] for column in columns), 'o', markersize=5,
              markerfacecolor=palette.NOW, **rim)


def _draw_space(axis: typing.Any, places: Floats, turns: Floats, picked: list[int]) -> None:
    """Draw the way in space, up being up: right, forward, minus down."""
    middle, half = _cube(places)
    rows = np.array([[1, 0, 0], [0, 0, 1], [0, -1, 0]])
    middle = rows @ middle
    corner = 0.16 * half * np.array([[-0.8, -0.6, 1.2], [0.8, -0.6, 1.2], [0.8, 0.6, 1.2],
                                     [-0.8, 0.6, 1.2], [-0.8, -0.6, 1.2]])
    for index in picked:
        rotation = motion.rotation_from_vector(turns[index])
        far = (places[index] + corner @ rotation.T) @ rows.T
        near = np.broadcast_to(rows @ places[index], far.shape)
        axis.plot(*far.T, color=palette.SOFT, linewidth=0.8)
        for line in np.stack([near, far], axis=1)[:4]:
            axis.plot(*line.T, color=palette.SOFT, linewidth=0.6)
    _draw_way(axis, *(places @ rows.T).T)
    for setter, centre in zip((axis.set_xlim, axis.set_ylim, axis.set_zlim), middle, strict=True):
        setter(centre - half, centre + half)
    axis.set_xlabel('right')
    axis.set_ylabel('forward')
    axis.set_zlabel('up')
    axis.view_init(elev=_ELEVATION_DEG, azim=_azimuth((places[-1] - places[0]) @ rows.T))
    axis.set_box_aspect((1, 1, 1), zoom=0.88)


def _azimuth(way: Floats) -> float:
    """Return the direction to look from, degrees, in which a way (3,) is longest."""
    azimuths = np.array([-150.0, -120.0, -60.0, -30.0])
    around, up = np.radians(azimuths), math.radians(_ELEVATION_DEG)
    sights = np.stack([np.cos(around) * math.cos(up), np.sin(around) * math.cos(up),
                       np.full(4, math.sin(up))], axis=1)
    return float(azimuths[np.linalg.norm(np.cross(sights, way), axis=1).argmax()])


def _draw_key(axis: typing.Any) -> None:
    axis.axis('off')
    axis.set(xlim=(0, 1), ylim=(0, 1))
    rim = {'markeredgecolor': palette.INK, 'linestyle': 'none'}
    for y, words, marker, look in (
            (0.86, 'start', 'o', {'markerfacecolor': palette.PAPER, **rim}),
            (0.72, 'end', 'o', {'markerfacecolor': palette.NOW, **rim}),
            (0.58, 'where it was taught', 'D', {
                'markerfacecolor': 'none', 'markeredgecolor': palette.GOAL,
                'markeredgewidth': 2})):
        axis.plot(0.09, y, marker, markersize=7, **look)
        axis.text(0.2, y, words, va='center')
    for y, words, colour in zip((0.44, 0.30, 0.16), ("camera's right", "camera's down",
                                                     "camera's line of sight"), palette.AXES,
                                strict=True):
        axis.plot([0.04, 0.14], [y, y], color=colour, linewidth=1.6)
        axis.text(0.2, y, words, va='center')
