# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The figures of a record: what happened over time, and where points and camera went."""

from __future__ import annotations

import math
import typing

import numpy as np

from servo_nodes.report import palette
from servo_nodes.report.drawing import Drawing, pyplot_style, saved
from servo_nodes.report.record import Path, Record
from servo_nodes.report.space import draw_camera
from servo_nodes.report.stops import STOPPED, spans, stops
from servo_nodes.values import SECOND_NS, Floats, Stamp

MOST_PATHS = 40
_SILENCE = 6.0
_BINS = 1000
_WIDTH_IN, _STRIP_IN, _PANEL_IN = 9.2, 0.76, 1.22
_LINES: tuple[typing.Any, ...] = ('-', (0, (5, 1.6)), (0, (1.2, 1.6)))


def drawings(record: Record) -> list[Drawing]:
    """Return every figure that the record has the numbers for.

    Raises
    ------
    MissingExtra
        When matplotlib is not installed.
    """
    found = [draw_time(record), draw_paths(record), draw_camera(record)]
    return [drawing for drawing in found if drawing is not None]


def draw_time(record: Record) -> Drawing | None:
    """Draw everything that has a time on one axis: states on top, a panel for each quantity."""
    panels = [(draw, record.series[name]) for name, draw in _PANELS if name in record.series]
    if not panels and not record.events:
        return None
    with pyplot_style() as make:
        figure = make(figsize=(_WIDTH_IN, _STRIP_IN + _PANEL_IN * len(panels) + 0.35),
                      layout='constrained')
        figure.get_layout_engine().set(h_pad=0.03, hspace=0.02)
        axes = figure.subplots(len(panels) + 1, 1, sharex=True, squeeze=False,
                               height_ratios=[_STRIP_IN] + [_PANEL_IN] * len(panels))[:, 0]
        _strip(axes[0], record)
        for axis, (draw, series) in zip(axes[1:], panels, strict=True):
            _stops(axis, record)
            t, values = _thinned(_seconds(record, series.times), series.values)
            draw(axis, record, *_with_gaps(t, values))
        axes[-1].set_xlabel('time, s')
        axes[-1].set_xlim(0, max(1e-3, (record.end - record.origin) / SECOND_NS))
        figure.align_ylabels(axes)
        media, data = saved(figure)
    return Drawing('time', 'What happened, and when', 'States on top, quantities below, one time '
                   'axis. Shaded: the controller had stopped the camera (holding or faulted).',
                   media, data)


def draw_paths(record: Record) -> Drawing | None:
    """Draw the ways the goal points took through the image, over the goal view."""
    width, height = record.image_size
    if not record.paths or not width or not height:
        return None
    with pyplot_style() as make:
        figure = make(figsize=(_WIDTH_IN, _WIDTH_IN * height / width))
        axis = figure.add_axes((0, 0, 1, 1))
        axis.set(xlim=(-0.5, width - 0.5), ylim=(height - 0.5, -0.5))
        axis.axis('off')
        for path in _spread(record.paths):
            _draw_path(axis, path)
        media, data = saved(figure, transparent=True)
    shown = min(len(record.paths), MOST_PATHS)
    return Drawing(
        'paths', 'The way of the points through the image',
        f'{shown} of {len(record.paths)} points over the taught view: from where each was first '
        'seen (ring) to where it was last seen (dot); the diamond is where it was taught.',
        media, data, record.picture('goal'))


def _draw_path(axis: typing.Any, path: Path) -> None:
    u, v = path.pixels_uv.T
    for colour, width in ((palette.INK, 2.6), (palette.NOW, 1.3)):
        axis.plot(u, v, color=colour, linewidth=width)
    rim = {'markeredgecolor': palette.INK, 'linestyle': 'none'}
    axis.plot(u[:1], v[:1], 'o', markersize=5, markerfacecolor=palette.PAPER, **rim)
    for colour, width in ((palette.INK, 3.2), (palette.GOAL, 1.6)):
        axis.plot(*path.goal_uv, 'D', markersize=8, markerfacecolor='none', markeredgewidth=width,
                  markeredgecolor=colour)
    axis.plot(u[-1:], v[-1:], 'o', markersize=5, markerfacecolor=palette.NOW, **rim)


def _spread(paths: typing.Sequence[Path]) -> list[Path]:
    """Return up to `MOST_PATHS` of the longest-seen paths, spread over the image."""
    left = sorted(paths, key=lambda path: (-len(path.times), path.ident))
    left = left[:max(MOST_PATHS, len(left) // 2)]
    chosen = left[:1]
    goals = np.array([path.goal_uv for path in left])
    gaps = np.full(len(left), np.inf)
    while len(chosen) < min(MOST_PATHS, len(left)):
        gaps = np.minimum(gaps, np.linalg.norm(goals - chosen[-1].goal_uv, axis=1))
        chosen.append(left[int(gaps.argmax())])
    return chosen


def _seconds(record: Record, times: typing.Any) -> Floats:
    seconds: Floats = (np.asarray(times) - record.origin) / SECOND_NS
    return seconds


def _with_gaps(t: Floats, values: Floats) -> tuple[Floats, Floats]:
    """Return times (N,) and rows (N, K) with a row of NaN wherever the series fell silent."""
    steps = np.diff(t)
    if not len(steps):
        return t, values
    gaps = np.flatnonzero(steps > max(_SILENCE * float(np.median(steps)), 0.1)) + 1
    return (np.insert(t, gaps, t[gaps - 1] + 1e-3), np.insert(values, gaps, np.nan, axis=0))


def _thinned(t: Floats, values: Floats) -> tuple[Floats, Floats]:
    """Return at most a few thousand rows that keep every peak: each bin's extremes."""
    size = -(-len(t) // _BINS)
    if size < 3:
        return t, values
    starts = np.arange(0, len(t) - size + 1, size)
    bins = values[:len(starts) * size].reshape(len(starts), size, -1)
    low = np.where(np.isfinite(bins), bins, np.inf).argmin(axis=1)
    high = np.where(np.isfinite(bins), bins, -np.inf).argmax(axis=1)
    kept = np.unique(np.concatenate([
        (starts[:, None] + np.hstack([low, high])).ravel(), starts,
        np.arange(len(starts) * size, len(t)), [len(t) - 1]]))
    return t[kept], values[kept]


def _logarithmic(axis: typing.Any, columns: Floats) -> None:
    """Use a logarithmic axis where the values span more than a decade."""
    positive = columns[np.isfinite(columns) & (columns > 0)]
    if len(positive) and positive.max() > 10 * positive.min():
        axis.set_yscale('log')


def _second(record: Record, stamp: Stamp) -> float:
    return (stamp - record.origin) / SECOND_NS


def _strip(axis: typing.Any, record: Record) -> None:
    """Draw the states as one coloured strip, each with its word, reasons above it."""
    axis.set(ylim=(-0.05, 2.7), yticks=[])
    axis.grid(False)
    axis.spines[['left', 'bottom']].set_visible(False)
    axis.tick_params(axis='x', length=0)
    whole = max(1, record.end - record.origin)
    for span in spans(record):
        start, state = _second(record, span.start), span.event.state
        colour = palette.STATES.get(state, palette.RULE)
        axis.broken_barh([(start, span.seconds)], (0, 1), facecolor=colour,
                         edgecolor=palette.PAPER, linewidth=0.8)
        if (span.end - span.start) / whole > 0.012 * len(state):
            axis.text(start + span.seconds / 2, 0.46, state, ha='center', va='center',
                      color=palette.text_on(colour), fontsize=8.5)
    _reasons(axis, record, whole / SECOND_NS)


def _reasons(axis: typing.Any, record: Record, seconds: float) -> None:
    """Write the reason of each stop above the strip, in two rows; what has no room is left out."""
    free = [-math.inf, -math.inf]
    for stop in stops(record):
        start = _second(record, stop.span.start)
        label = f'{stop.span.event.reason.replace("_", " ")} at {start:.2f} s'
        wide = 0.007 * seconds * len(label)
        left = min(start, seconds - wide)
        row = next((row for row in (0, 1) if left >= free[row]), None)
        top = 1.15 if row is None else 1.25 + 0.75 * row
        axis.plot([start, start], [1, top], color=palette.INK, linewidth=0.8)
        if row is not None:
            axis.text(left, top, label, ha='left', va='bottom', fontsize=8)
            free[row] = left + wide


def _stops(axis: typing.Any, record: Record) -> None:
    for span in spans(record):
        if span.event.state in STOPPED:
            axis.axvspan(_second(record, span.start), _second(record, span.end), linewidth=0,
                         color=palette.STATES[span.event.state], alpha=0.2)


def _error(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    axis.plot(t, np.where(values > 0, values, np.nan), color=palette.INK)
    _logarithmic(axis, values)
    axis.set_ylabel('error\npx')


def _twist(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    _recorded(axis, record, slice(0, 3), 1000)
    _speeds(axis, t, 1000 * values[:, :3], ('right', 'down', 'forward'))
    _cap(axis, record, 'linear', 1000)
    axis.set_ylabel('linear\nmm/s')


def _turn(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    _recorded(axis, record, slice(3, 6), math.degrees(1))
    _speeds(axis, t, np.degrees(values[:, 3:]), ('about right', 'about down', 'roll'))
    _cap(axis, record, 'angular', math.degrees(1))
    axis.set_ylabel('angular\ndeg/s')


def _speeds(axis: typing.Any, t: Floats, values: Floats, labels: tuple[str, ...]) -> None:
    """Draw three components and their norm."""
    for column, label, colour, dash in zip(values.T, labels, palette.AXES, _LINES, strict=True):
        axis.plot(t, column, color=colour, label=label, linestyle=dash, linewidth=1.1)
    axis.plot(t, np.linalg.norm(values, axis=1), color=palette.INK, label='norm', linewidth=1.6)


def _recorded(axis: typing.Any, record: Record, part: slice, scale: float) -> None:
    """Draw the norm of the other run's twist, wide, so that the nearer one shows on it."""
    series = record.series.get('recorded')
    if series is not None:
        t, values = _thinned(_seconds(record, series.times), series.values[:, part])
        norm = np.linalg.norm(values, axis=1)[:, None]
        axis.plot(*_with_gaps(t, scale * norm), color=palette.GOAL, linewidth=4, alpha=0.6,
                  label='recorded norm')


def _cap(axis: typing.Any, record: Record, label: str, scale: float) -> None:
    caps = record.series.get('caps')
    if caps is not None:
        axis.plot(_seconds(record, caps.times), scale * caps.column(label), color=palette.SOFT,
                  linestyle=(0, (2, 2)), linewidth=1, label='cap')
    _key(axis, 6)


def _key(axis: typing.Any, columns: int) -> None:
    """Put the key at the top right, on room made for it above the curves."""
    low, high = axis.get_ylim()
    if axis.get_yscale() == 'log':
        axis.set_ylim(low, high * (high / low) ** 0.28)
    else:
        axis.set_ylim(low, high + 0.24 * (high - low))
    axis.legend(loc='upper right', ncols=columns, borderpad=0, borderaxespad=0.1,
                columnspacing=1.2, handlelength=1.8)


def _points(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    axis.fill_between(t, values[:, 0], step='post', color=palette.GOAL, alpha=0.35, linewidth=0)
    axis.step(t, values[:, 0], where='post', color=palette.INK, linewidth=0.9)
    axis.set_ylabel('points\nseen')
    axis.set_ylim(bottom=0)


def _condition(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    axis.plot(t, values, color=palette.INK)
    _logarithmic(axis, values)
    axis.set_ylabel('condition')


def _latency(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    labels = record.series['latency'].labels
    colours = (palette.INK, *palette.AXES)
    for column, label, colour, dash in zip(values.T, labels, colours, (*_LINES, '-'),
                                           strict=False):
        axis.plot(t, column, color=colour, label=label, linewidth=1, linestyle=dash)
    axis.set_ylabel('latency\nms')
    axis.set_ylim(bottom=0)
    _key(axis, 4)


def _offset(axis: typing.Any, record: Record, t: Floats, values: Floats) -> None:
    metres = np.linalg.norm(values[:, :3], axis=1)
    angle = np.linalg.norm(values[:, 3:], axis=1)
    axis.semilogy(t, 1000 * metres, color=palette.INK, label='position, mm')
    axis.semilogy(t, np.degrees(angle), color=palette.AXES[0], linestyle=_LINES[1],
                  label='angle, deg')
    axis.set_ylabel('true offset\nmm, deg')
    _key(axis, 2)


_Panel: typing.TypeAlias = typing.Callable[[typing.Any, Record, Floats, Floats], None]
_PANELS: tuple[tuple[str, _Panel], ...] = (
    ('error', _error), ('offset', _offset), ('twist', _twist), ('twist', _turn),
    ('points', _points), ('condition', _condition), ('latency', _latency))
