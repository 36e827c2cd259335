# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The verdict on a replay: measured against thresholds, in words, as a table.

A replay shows what the loop would have said to what was seen. It cannot show that the loop
converges: the recorded views do not answer to the shadow's commands.
"""

from __future__ import annotations

import math
import pathlib
from collections.abc import Sequence
from dataclasses import dataclass

from servo_nodes.control.states import ENGAGED
from servo_nodes.offline.replay_events import Recorded
from servo_nodes.offline.replay_log import Log, overlapping
from servo_nodes.offline.replay_settings import page_from_yaml
from servo_nodes.settings import Checked, group, setting, settings_from_mapping
from servo_nodes.values import SECOND_NS, Stamp, State

CAUTION = ('A replay cannot show that the loop converges: the recorded views do not answer to the '
           "shadow's commands.")
STOP_SLACK_NS = SECOND_NS * 3 // 10


@dataclass(frozen=True)
class PointsLimits(Checked):
    """Points in the views while the loop was on."""

    least: int = setting(8, low=1, high=20000,
                         help='points that the share below of the views must have, at least')
    share: float = setting(0.95, low=0.01, high=1.0,
                           help='share of the views while the loop is on')


@dataclass(frozen=True)
class LatencyLimits(Checked):
    """From the image to the command."""

    most: float = setting(0.25, unit='s', low=0.001, high=10.0,
                          help='95 % of the commands rest on an image at most this old when new')


@dataclass(frozen=True)
class StopLimits(Checked):
    """Stops of the shadow and of the recorded controller."""

    time: float = setting(0.25, unit='s', low=0.01, high=10.0,
                          help='from the last good view to the command of exact zero, each stop')
    held: float = setting(0.2, low=0.0, high=1.0,
                          help='share of the time with the loop on that it may hold')
    false: int = setting(0, low=0, high=1000000,
                         help='stops of the shadow where the recorded controller went on')
    missed: int = setting(0, low=0, high=1000000,
                          help='stops of the recorded controller where the shadow went on')


@dataclass(frozen=True)
class DeviationLimits(Checked):
    """The shadow's twist against the recorded one."""

    linear: float = setting(0.01, unit='m/s', low=0.0, high=10.0,
                            help='99 % of the shadow twists are at most this far off')
    angular: float = setting(0.05, unit='rad/s', low=0.0, high=10.0,
                             help='99 % of the shadow turn rates are at most this far off')


@dataclass(frozen=True)
class SettledLimits(Checked):
    """The end of the way, where the recording has one."""

    error_px: float = setting(2.0, unit='px', low=0.0, high=1000.0,
                              help='mean error while last settled, as recorded')


@dataclass(frozen=True)
class AgainstLimits(Checked):
    """How far two replays may be apart."""

    linear: float = setting(0.001, unit='m/s', low=0.0, high=10.0,
                            help='largest difference of the twists')
    angular: float = setting(0.005, unit='rad/s', low=0.0, high=10.0,
                             help='largest difference of the turn rates')
    points: float = setting(1.0, low=0.0, high=20000.0,
                            help='largest difference of the median points seen')
    error_px: float = setting(0.1, unit='px', low=0.0, high=1000.0,
                              help='largest difference of the median error')
    states: float = setting(0.05, unit='s', low=0.0, high=10.0,
                            help='largest shift of the changes of state')


@dataclass(frozen=True)
class Thresholds(Checked):
    """What a replay is judged by."""

    points: PointsLimits = group(PointsLimits)
    latency: LatencyLimits = group(LatencyLimits)
    stop: StopLimits = group(StopLimits)
    deviation: DeviationLimits = group(DeviationLimits)
    settled: SettledLimits = group(SettledLimits)
    against: AgainstLimits = group(AgainstLimits)


@dataclass(frozen=True)
class Finding:
    """One line of the verdict.

    Attributes
    ----------
    name : str, of the threshold
    ok : bool or None: there was nothing to judge
    value, limit : float; NaN where there is none
    unit : str
    text : str, a sentence
    """

    name: str
    ok: bool | None
    value: float
    limit: float
    unit: str
    text: str


def thresholds_from_file(path: pathlib.Path | None) -> Thresholds:
    """Return the thresholds in a YAML file, the rest by default; ValueError naming the file."""
    if path is None:
        return Thresholds()
    page = page_from_yaml(path)
    try:
        return settings_from_mapping(Thresholds, {str(name): value
                                                  for name, value in page.items()})
    except ValueError as error:
        raise ValueError(f'{path}: {error}') from error


def judged(log: Log, recorded: Recorded, limits: Thresholds) -> list[Finding]:
    """Return a finding for every threshold."""
    on = sum(log.states[state] for state in ENGAGED)
    return [_engaged(log, on), _points(log, limits.points), _latency(log, limits.latency),
            _stop_time(log, limits.stop), _held(log, on, limits.stop),
            *_stops_compared(log, recorded, limits.stop),
            *_deviation(log, limits.deviation), _settled(log, limits.settled)]


def passed(findings: Sequence[Finding]) -> bool:
    """Return whether nothing failed and something was judged."""
    judged_ones = [finding.ok for finding in findings if finding.ok is not None]
    return bool(judged_ones) and all(judged_ones)


def table(findings: Sequence[Finding]) -> str:
    """Return the findings as text."""
    signs = {True: 'ok', False: 'FAILED', None: '-'}
    width = max(len(finding.name) for finding in findings)
    return '\n'.join(f'{signs[finding.ok]:>6}  {finding.name:<{width}}  {finding.text}'
                     for finding in findings)


def _at_most(name: str, value: float, limit: float, unit: str, what: str) -> Finding:
    words = f'{value:.4g} {unit}'.rstrip(), f'{limit:.4g} {unit}'.rstrip()
    return Finding(name, value <= limit, value, limit, unit,
                   f'{what}: {words[0]}, at most {words[1]}')


def _open(name: str, why: str) -> Finding:
    return Finding(name, None, math.nan, math.nan, '', f'not judged: {why}')


def _engaged(log: Log, on: int) -> Finding:
    refused = [told.answer.text for told in log.answers if not told.answer.ok]
    text = (f'the loop was on for {on} of {log.ticks} ticks' if on else
            'the loop was never on' + (f': {refused[-1]}' if refused else ''))
    return Finding('engaged', on > 0, float(on), 1.0, 'ticks', text)


def _points(log: Log, limits: PointsLimits) -> Finding:
    count = sum(log.points.values())
    if not count:
        return _open('points.least', 'no view came while the loop was on')
    below, value = 0, 0
    for value in sorted(log.points):
        below += log.points[value]
        if below > (1.0 - limits.share) * count:
            break
    return Finding('points.least', value >= limits.least, float(value), float(limits.least), '',
                   f'{100 * limits.share:g} % of {count} views have at least {value} points, at '
                   f'least {limits.least} expected')


def _latency(log: Log, limits: LatencyLimits) -> Finding:
    if not log.latency.count:
        return _open('latency.most', 'no view was used while the loop was on')
    return _at_most('latency.most', log.latency.quantile(0.95), limits.most, 's',
                    'image to command, 95 %')


def _stop_time(log: Log, limits: StopLimits) -> Finding:
    if not log.stops:
        return _open('stop.time', 'the loop did not stop')
    late = [stop for stop in log.stops if stop.reaction is None and stop.end is not None]
    known = [(stop.reaction, stop) for stop in log.stops if stop.reaction is not None]
    if late or not known:
        stop = late[0] if late else log.stops[0]
        return Finding('stop.time', False, math.inf, limits.time, 's',
                       f'the stop for {stop.reason} never came to exact zero')
    value, stop = max(known, key=lambda pair: pair[0])
    return _at_most('stop.time', value, limits.time, 's',
                    f'last good view to exact zero, worst of {len(log.stops)} ({stop.reason})')


def _held(log: Log, on: int, limits: StopLimits) -> Finding:
    if not on:
        return _open('stop.held', 'the loop was never on')
    return _at_most('stop.held', log.states[State.HOLDING] / on, limits.held, '',
                    'share of the time held')


def recorded_stops(log: Log, recorded: Recorded) -> list[tuple[Stamp, Stamp, bool]]:
    """Return start, end, ns, and certainty of the recorded stops, by what the recording has."""
    if not recorded.turns:
        return log.spans.found
    ends = [turn.time for turn in recorded.turns[1:]] + [log.last]
    found = [(turn.time, end, True) for turn, end in zip(recorded.turns, ends, strict=True)
             if turn.state in (State.HOLDING.value, State.FAULTED.value)]
    joined: list[tuple[Stamp, Stamp, bool]] = []
    for span in found:
        if joined and joined[-1][1] == span[0]:
            joined[-1] = joined[-1][0], span[1], True
        else:
            joined.append(span)
    return joined


def _stops_compared(log: Log, recorded: Recorded, limits: StopLimits) -> list[Finding]:
    if not recorded.turns and not log.compared:
        why = 'neither commands nor states were recorded'
        return [_open('stop.false', why), _open('stop.missed', why)]
    theirs = recorded_stops(log, recorded)
    ours = [(stop.start, log.last if stop.end is None else stop.end) for stop in log.stops]
    false = [stop for stop, (start, end) in zip(log.stops, ours, strict=True) if not overlapping(
        start, end, [(first, last) for first, last, _ in theirs], STOP_SLACK_NS)]
    missed = [span for span in theirs if span[2]
              and not overlapping(span[0], span[1], ours, STOP_SLACK_NS)]
    named = f' (first: {false[0].reason})' if false else ''
    return [_at_most('stop.false', float(len(false)), float(limits.false), '',
                     f'stops of the shadow alone{named}'),
            _at_most('stop.missed', float(len(missed)), float(limits.missed), '',
                     f'stops of the recorded controller alone, of {len(theirs)}')]


def _deviation(log: Log, limits: DeviationLimits) -> list[Finding]:
    if not log.compared:
        why = 'no commands were recorded'
        return [_open('deviation.linear', why), _open('deviation.angular', why)]
    if log.frames:
        text = f'the frames differ: {", ".join(sorted(log.frames))}'
        return [Finding(name, False, math.nan, limit, unit, text) for name, limit, unit in (
            ('deviation.linear', limits.linear, 'm/s'),
            ('deviation.angular', limits.angular, 'rad/s'))]
    words = f'shadow to recorded twist, 99 % of {log.compared}'
    return [_at_most('deviation.linear', log.linear.quantile(0.99), limits.linear, 'm/s', words),
            _at_most('deviation.angular', log.angular.quantile(0.99), limits.angular, 'rad/s',
                     words)]


def _settled(log: Log, limits: SettledLimits) -> Finding:
    count, mean = log.settled
    if not count:
        return _open('settled.error_px', 'the shadow was never settled')
    return _at_most('settled.error_px', mean, limits.error_px, 'px',
                    'mean error while last settled, as recorded')
