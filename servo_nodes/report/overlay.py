# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Draw on an image what the loop sees and does: points, what they lack, the state, the caps.

An open diamond is where a point was taught, a full dot is where it is now, the line between them
is the way it still has to go: the run is home when every dot lies in its diamond. All marks have a
dark rim, so that they show on bright steel and in dark corners alike. Text is ASCII, which every
OpenCV can draw.
"""

from __future__ import annotations

import math
import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.report import palette
from servo_nodes.values import State

Picture: typing.TypeAlias = npt.NDArray[np.uint8]
_FONT, _SMOOTH = cv2.FONT_HERSHEY_SIMPLEX, cv2.LINE_AA
_SHIFT = 4
_RIM = palette.bgr(palette.INK)
_PAPER = palette.bgr(palette.PAPER)
_SOFT = (205, 196, 188)
_GROUND_SHARE = 0.72
_DIAMOND = 6.5 * np.array([[0, -1], [1, 0], [0, 1], [-1, 0]])
_DOT = 3.2


def overlay(image: Picture, *, points_px: npt.ArrayLike | None = None,
            goal_px: npt.ArrayLike | None = None, homography: npt.ArrayLike | None = None,
            state: State | None = None, reason: str = '', text: str = '',
            error_px: float | None = None, points: tuple[int, int | None] | None = None,
            speed: tuple[float, float] | None = None,
            caps: tuple[float, float] | None = None) -> Picture:
    """Return a copy of an image, as bgr, with everything known drawn on it; the rest is left out.

    Parameters
    ----------
    image : (height, width) grey or (height, width, 3) bgr, uint8
    points_px, goal_px : (N, 2), px, where the points are and where they were taught
    homography : (3, 3), goal px -> image px; draws the corners of the taught view
    state, reason, text : what the controller does, the reason's word, and its sentence
    error_px : float, px
    points : seen, of how many (None: not known)
    speed, caps : linear m/s, angular rad/s; speed is shown as a share of its cap

    Raises
    ------
    ValueError
        For an image of another kind, or points without their goals.
    """
    image = np.asarray(image)
    if image.dtype != np.uint8 or image.ndim not in (2, 3) or (
            image.ndim == 3 and image.shape[2] != 3):
        raise ValueError('image: expected uint8 of shape (h, w) or (h, w, 3), '
                         f'got {image.dtype} of shape {image.shape}')
    canvas = (np.asarray(cv2.cvtColor(image, cv2.COLOR_GRAY2BGR), np.uint8) if image.ndim == 2
              else image.copy())
    unit = max(0.5, min(canvas.shape[0] / 480, canvas.shape[1] / 640))
    if homography is not None:
        _draw_corners(canvas, np.asarray(homography, np.float64), unit)
    now, goal = _pairs(points_px, goal_px)
    _draw_points(canvas, now, goal, unit)
    _draw_head(canvas, unit, state, reason, text)
    _draw_foot(canvas, unit, error_px, points, speed, caps)
    return canvas


def encoded(image: Picture, *, quality: int = 82, most_width: int = 960) -> bytes:
    """Return a picture as JPEG bytes, shrunk to `most_width`, px; light enough for a mail."""
    height, width = image.shape[:2]
    if width > most_width:
        size = (most_width, max(1, round(height * most_width / width)))
        image = np.asarray(cv2.resize(image, size, interpolation=cv2.INTER_AREA), np.uint8)
    done, data = cv2.imencode('.jpg', image, [
        cv2.IMWRITE_JPEG_QUALITY, quality, cv2.IMWRITE_JPEG_OPTIMIZE, 1])
    if not done:
        raise ValueError(f'picture: expected pixels that JPEG can hold, got {image.shape}')
    return bytes(data.tobytes())


def _pairs(points_px: npt.ArrayLike | None,
           goal_px: npt.ArrayLike | None) -> tuple[npt.NDArray[np.float64], ...]:
    none = np.empty((0, 2))
    now = none if points_px is None else np.asarray(points_px, np.float64).reshape(-1, 2)
    goal = none if goal_px is None else np.asarray(goal_px, np.float64).reshape(-1, 2)
    if len(now) and len(goal) and len(now) != len(goal):
        raise ValueError(f'points_px: expected as many as goal_px ({len(goal)}), got {len(now)}')
    keep_now, keep_goal = np.isfinite(now).all(axis=1), np.isfinite(goal).all(axis=1)
    if len(now) == len(goal):
        keep_now = keep_goal = keep_now & keep_goal
    return now[keep_now], goal[keep_goal]


def _fixed(pixels: npt.NDArray[np.float64]) -> npt.NDArray[np.int32]:
    """Return pixels in OpenCV's fixed point, bounded to what it can draw."""
    return np.rint(np.clip(pixels, -1e5, 1e5) * (1 << _SHIFT)).astype(np.int32)


def _draw_points(canvas: Picture, now: npt.NDArray[np.float64], goal: npt.NDArray[np.float64],
                 unit: float) -> None:
    thin, wide = max(1, round(1.3 * unit)), max(3, round(3.4 * unit))
    paired = len(now) == len(goal)
    lines = list(_lines(now, goal, unit)) if paired else []
    diamonds = _fixed(goal[:, None, :] + _DIAMOND * unit)
    dots, radius = _fixed(now), _DOT * unit
    for rim in (True, False):
        width = wide if rim else thin
        cv2.polylines(canvas, lines, False, _RIM if rim else _PAPER, width, _SMOOTH, _SHIFT)
        cv2.polylines(canvas, list(diamonds), True,
                      _RIM if rim else palette.bgr(palette.GOAL), width, _SMOOTH, _SHIFT)
        size = round((radius + (1.2 * unit if rim else 0)) * (1 << _SHIFT))
        for x, y in dots.tolist():
            cv2.circle(canvas, (x, y), size, _RIM if rim else palette.bgr(palette.NOW), -1,
                       _SMOOTH, _SHIFT)


def _lines(now: npt.NDArray[np.float64], goal: npt.NDArray[np.float64],
           unit: float) -> npt.NDArray[np.int32]:
    """Return the ways still to go, as far as the diamond's edge; short ones lie inside it."""
    way = goal - now
    length = np.abs(way).sum(axis=1, keepdims=True)
    long = length[:, 0] > 6.5 * unit
    ends = goal - way * (6.5 * unit / np.maximum(length, 1e-9))
    return _fixed(np.stack([now[long], ends[long]], axis=1))


def _draw_corners(canvas: Picture, matrix: npt.NDArray[np.float64], unit: float) -> None:
    """Mark the corners of the taught view where they are now; at home they are the image's own."""
    height, width = canvas.shape[:2]
    box = np.array([[0, 0], [width - 1, 0], [width - 1, height - 1], [0, height - 1]], np.float64)
    rays = np.column_stack([box, np.ones(4)]) @ matrix.T
    if not np.isfinite(rays).all() or np.any(rays[:, 2] * np.sign(rays[0, 2]) <= 1e-9):
        return
    corners = rays[:, :2] / rays[:, 2:]
    for before, corner, behind in zip(np.roll(corners, 1, 0), corners, np.roll(corners, -1, 0),
                                      strict=True):
        hook = _fixed(np.array([corner + 0.09 * (before - corner), corner,
                                corner + 0.09 * (behind - corner)]))
        for colour, wide in ((_RIM, 4.6), (palette.bgr(palette.GOAL), 2.2)):
            cv2.polylines(canvas, [hook], False, colour, max(1, round(wide * unit)), _SMOOTH,
                          _SHIFT)


def _shade(canvas: Picture, top: int, bottom: int) -> None:
    """Darken a band of rows so that light text reads on it."""
    band = canvas[max(0, top):bottom]
    if band.size:
        cv2.addWeighted(band, 1 - _GROUND_SHARE, np.full_like(band, _RIM), _GROUND_SHARE, 0, band)


def _write(canvas: Picture, text: str, left: float, base: float, size: float,
           colour: tuple[int, int, int], room: float = math.inf) -> float:
    """Write ASCII text, cut to `room` px, and return where it ends, px."""
    text = text.encode('ascii', 'replace').decode()
    thickness = max(1, round(1.9 * size))

    def wide(words: str) -> float:
        return float(cv2.getTextSize(words, _FONT, size, thickness)[0][0])
    if wide(text) > room:
        while text and wide(text + '...') > room:
            text = text[:-1]
        text = text.rstrip() + '...'
    cv2.putText(canvas, text, (round(left), round(base)), _FONT, size, colour, thickness, _SMOOTH)
    return left + wide(text)


def _draw_head(canvas: Picture, unit: float, state: State | None, reason: str,
               text: str) -> None:
    width = canvas.shape[1]
    if state is None and not reason and not text:
        return
    row, pad = 30 * unit, 10 * unit
    second = text if state is not None or reason else ''
    first = reason if second or reason else text
    if reason in ('', 'none'):
        first, second = ('' if state is not None else text), (text if state is not None else '')
    if state is not None and second and not first:
        first, second = second, ''
    _shade(canvas, 0, round(row + (22 * unit if second else 0)))
    left = pad
    if state is not None:
        left = _draw_chip(canvas, state, unit) + pad
    key = width - 128 * unit
    _draw_key(canvas, key, unit)
    _write(canvas, first.replace('_', ' '), left, 20.5 * unit, 0.5 * unit, _PAPER,
           key - left - pad)
    _write(canvas, second, pad, row + 13 * unit, 0.42 * unit, _SOFT, width - 2 * pad)


def _draw_key(canvas: Picture, left: float, unit: float) -> None:
    """Say which mark is which."""
    none = np.empty((0, 2))
    middle = 15 * unit
    _draw_points(canvas, np.array([[left, middle]]), none, unit)
    _draw_points(canvas, none, np.array([[left + 54 * unit, middle]]), unit)
    for offset, word in ((9, 'now'), (66, 'taught')):
        _write(canvas, word, left + offset * unit, 19.5 * unit, 0.42 * unit, _SOFT)


def _draw_chip(canvas: Picture, state: State, unit: float) -> float:
    """Draw the state as a coloured label with its shape; return its right end, px."""
    colour = palette.STATES[state.value]
    ground, ink = palette.bgr(colour), palette.bgr(palette.text_on(colour))
    size = 0.52 * unit
    wide = cv2.getTextSize(state.value, _FONT, size, max(1, round(1.9 * size)))[0][0]
    right = 40 * unit + wide
    cv2.rectangle(canvas, (0, 0), (round(right), round(30 * unit)), ground, -1)
    _draw_shape(canvas, state, (17 * unit, 15 * unit), 6.5 * unit, ink)
    _write(canvas, state.value, 31 * unit, 20.5 * unit, size, ink)
    return right


def _draw_shape(canvas: Picture, state: State, centre: tuple[float, float], radius: float,
                colour: tuple[int, int, int]) -> None:
    """Draw the state's shape: ring, arrow, two bars, tick, cross."""
    strokes: dict[State, list[list[tuple[float, float]]]] = {
        State.SERVOING: [[(-0.7, -1), (0.9, 0), (-0.7, 1), (-0.7, -1)]],
        State.HOLDING: [[(-0.5, -0.9), (-0.5, 0.9)], [(0.5, -0.9), (0.5, 0.9)]],
        State.SETTLED: [[(-1, 0.1), (-0.25, 0.8), (1, -0.8)]],
        State.FAULTED: [[(-0.8, -0.8), (0.8, 0.8)], [(0.8, -0.8), (-0.8, 0.8)]],
    }
    width = max(1, round(0.36 * radius))
    for stroke in strokes.get(state, []):
        cv2.polylines(canvas, [_fixed(np.array(stroke) * radius + centre)], False, colour, width,
                      _SMOOTH, _SHIFT)
    if state is State.STANDBY:
        x, y = _fixed(np.array(centre)).tolist()
        cv2.circle(canvas, (x, y), round(0.8 * radius * (1 << _SHIFT)), colour, width, _SMOOTH,
                   _SHIFT)


def _draw_foot(canvas: Picture, unit: float, error_px: float | None,
               points: tuple[int, int | None] | None, speed: tuple[float, float] | None,
               caps: tuple[float, float] | None) -> None:
    height, width = canvas.shape[:2]
    words = []
    if error_px is not None:
        words.append(f'error {error_px:.2f} px' if math.isfinite(error_px) else 'error unknown')
    if points is not None:
        words.append(f'{points[0]}{"" if points[1] is None else f" of {points[1]}"} points')
    if not words and speed is None:
        return
    _shade(canvas, round(height - 26 * unit), height)
    base, size = height - 9 * unit, 0.45 * unit
    _write(canvas, '   '.join(words), 10 * unit, base, size, _PAPER)
    if speed is None:
        return
    shares = [math.nan, math.nan] if caps is None else [
        value / cap if cap > 0 else math.nan for value, cap in zip(speed, caps, strict=True)]
    labels = (f'{1000 * speed[0]:4.0f} mm/s', f'{math.degrees(speed[1]):4.1f} deg/s')
    for left, label, share in zip((0.47 * width, 0.735 * width), labels, shares, strict=True):
        end = _write(canvas, label, left, base, size, _PAPER)
        _draw_gauge(canvas, share, (end + 7 * unit, left + 0.25 * width), height - 13 * unit, unit)


def _draw_gauge(canvas: Picture, share: float, ends: tuple[float, float], middle: float,
                unit: float) -> None:
    """Draw how much of a cap is in use; at the cap the bar turns to the colour of a warning."""
    half, (left, right) = 4 * unit, ends
    if right - left < 8 * unit or not math.isfinite(share):
        return
    filled = left + (right - left) * min(max(share, 0.0), 1.0)
    colour = palette.STATES['holding'] if share > 0.98 else palette.GOAL
    for end, bgr, thickness in ((filled, palette.bgr(colour), -1), (right, _SOFT, 1)):
        cv2.rectangle(canvas, (round(left), round(middle - half)),
                      (round(end), round(middle + half)), bgr, thickness)
