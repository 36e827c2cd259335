# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Two replays of one recording compared: two versions, or two settings."""

from __future__ import annotations

import math
import pathlib

import numpy as np

from servo_nodes.offline.verdict import AgainstLimits, Finding
from servo_nodes.report import record as records
from servo_nodes.report.record import Record, Series
from servo_nodes.values import SECOND_NS

LEAST_SHARED = 0.95


def other_from_path(path: pathlib.Path) -> Record:
    """Return the record of another replay, from its folder or its file.

    Raises
    ------
    ValueError
        One sentence that names the file.
    """
    return records.load(path / 'record.json' if path.is_dir() else path)


def compared(ours: Record, other: Record, limits: AgainstLimits) -> list[Finding]:
    """Return a finding for every tolerance; what only one of the two has is a failure."""
    return [*_twists(ours, other, limits),
            _medians('against.points', 'points', ours, other, limits.points, ''),
            _medians('against.error_px', 'error', ours, other, limits.error_px, 'px'),
            _states(ours, other, limits.states)]


def _twists(ours: Record, other: Record, limits: AgainstLimits) -> list[Finding]:
    pair = ours.series.get('twist'), other.series.get('twist')
    wanted = (('against.linear', slice(0, 3), limits.linear, 'm/s'),
              ('against.angular', slice(3, 6), limits.angular, 'rad/s'))
    if pair[0] is None or pair[1] is None:
        return [_lacking(name, limit, unit, 'commands') for name, _, limit, unit in wanted]
    apart = _apart(pair[0], pair[1])
    if apart is None:
        return [_lacking(name, limit, unit, 'the same times') for name, _, limit, unit in wanted]
    return [_judged(name, float(np.linalg.norm(apart[:, part], axis=1).max()), limit, unit,
                    f'largest of {len(apart)} differences of the twists')
            for name, part, limit, unit in wanted]


def _apart(ours: Series, other: Series) -> np.ndarray | None:
    """Return our rows minus the other's in force at the same time; None for other times."""
    inside = (ours.times >= other.times[0]) & (ours.times <= other.times[-1])
    if np.count_nonzero(inside) < LEAST_SHARED * len(inside):
        return None
    places = np.searchsorted(other.times, ours.times[inside], side='right') - 1
    difference: np.ndarray = ours.values[inside] - other.values[places]
    return difference


def _medians(name: str, series: str, ours: Record, other: Record, limit: float,
             unit: str) -> Finding:
    pair = ours.series.get(series), other.series.get(series)
    if pair == (None, None):
        return Finding(name, None, math.nan, limit, unit, 'not judged: neither replay has any')
    if pair[0] is None or pair[1] is None:
        return _lacking(name, limit, unit, series)
    values = [float(np.nanmedian(item.values)) if np.isfinite(item.values).any() else math.inf
              for item in pair if item is not None]
    apart = 0.0 if values[0] == values[1] else abs(values[0] - values[1])
    return _judged(name, apart, limit, unit, f'medians of {series}')


def _states(ours: Record, other: Record, limit: float) -> Finding:
    """Compare the changes of state and reason, and when they came."""
    words = [[(event.state, event.reason) for event in one.events] for one in (ours, other)]
    if words[0] != words[1]:
        at = next((index for index, pair in enumerate(zip(*words, strict=False))
                   if pair[0] != pair[1]), min(map(len, words)))
        said = [f'{item[at][0]} ({item[at][1]})' if at < len(item) else 'nothing more'
                for item in words]
        return Finding('against.states', False, math.inf, limit, 's',
                       f'change {at + 1} of state: {said[0]} here, {said[1]} there')
    shift = max((abs(a.stamp - b.stamp) for a, b in zip(ours.events, other.events, strict=True)),
                default=0) / SECOND_NS
    return _judged('against.states', shift, limit, 's',
                   f'largest shift of {len(words[0])} changes of state')


def _judged(name: str, value: float, limit: float, unit: str, what: str) -> Finding:
    words = f'{value:.4g} {unit}'.rstrip(), f'{limit:.4g} {unit}'.rstrip()
    return Finding(name, value <= limit, value, limit, unit,
                   f'{what}: {words[0]} apart, at most {words[1]}')


def _lacking(name: str, limit: float, unit: str, what: str) -> Finding:
    return Finding(name, False, math.inf, limit, unit,
                   f'expected {what} in both replays, got none in one')
