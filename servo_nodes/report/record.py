# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What a run leaves: series, events, pictures and facts, in memory and as one JSON file.

Whoever watches a run fills a `Recorder`; figures and page only read the `Record`.
A series that is absent is a panel that is absent: nobody has to know everything. The names that
the figures understand, each with its columns:

========== ============== ==================================================================
name       unit           columns
========== ============== ==================================================================
error      px             error
twist      m/s, rad/s     vx, vy, vz, wx, wy, wz: as commanded, camera in its own frame
recorded   m/s, rad/s     the same, of another run or version to compare with
caps       m/s, rad/s     linear, angular: the caps in force
points     1              seen, at the time they were heard of
condition  1              condition
latency    ms             any stages of the way from image to command, in order
offset     m, rad         x, y, z, rx, ry, rz: the true camera in the frame it had when taught
========== ============== ==================================================================

`Path`s, one per goal point, are kept apart: pixels (N, 2) at N times.
"""

from __future__ import annotations

import base64
import hashlib
import json
import math
import pathlib
import typing
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats, Stamp

FORMAT = 1
MOST_BYTES = 512 * 1024 * 1024
MEDIA = {b'\x89PNG': 'image/png', b'\xff\xd8\xff': 'image/jpeg'}
Scalar: typing.TypeAlias = 'bool | int | float | str'


@dataclass(frozen=True, eq=False)
class Series:
    """Numbers over time: `times` (N,), ns, not falling; `values` (N, K), one column per label."""

    unit: str
    labels: tuple[str, ...]
    times: npt.NDArray[np.int64]
    values: Floats

    def __post_init__(self) -> None:
        times = np.asarray(self.times, np.int64)
        values = np.asarray(self.values, np.float64)
        if times.ndim != 1 or values.shape != (len(times), len(self.labels)):
            raise ValueError(f'series: expected {len(times)} rows of {len(self.labels)} values, '
                             f'got shape {values.shape}')
        if np.any(np.diff(times) < 0):
            raise ValueError('series: expected times that do not fall, got one that does')
        object.__setattr__(self, 'times', times)
        object.__setattr__(self, 'values', values)

    def column(self, label: str) -> Floats:
        """Return the values (N,) under a label; KeyError when there is none."""
        if label not in self.labels:
            raise KeyError(label)
        column: Floats = self.values[:, self.labels.index(label)]
        return column


@dataclass(frozen=True)
class Event:
    """A moment at which the run changed: the state and reason from then on, and why in words."""

    stamp: Stamp
    state: str
    reason: str = 'none'
    text: str = ''


@dataclass(frozen=True)
class Picture:
    """An encoded picture (PNG or JPEG). `name` tells the page where it belongs.

    `start`, `end`, `goal` are told apart; `stop` pictures are set beside the stop they surround.
    """

    name: str
    stamp: Stamp
    caption: str
    data: bytes

    @property
    def media(self) -> str:
        """Return the media type its first bytes tell; ValueError for anything else."""
        for head, media in MEDIA.items():
            if self.data.startswith(head):
                return media
        raise ValueError(f'picture {self.name!r}: expected PNG or JPEG bytes, '
                         f'got {self.data[:4]!r}')


@dataclass(frozen=True, eq=False)
class Path:
    """Where one goal point was seen: `pixels_uv` (N, 2) at `times` (N,), ns; `goal_uv` (2,)."""

    ident: int
    goal_uv: Floats
    times: npt.NDArray[np.int64]
    pixels_uv: Floats


@dataclass(frozen=True)
class Verdict:
    """How the run ended: good, bad, or (None) not judged; one line, and the words below it."""

    ok: bool | None
    headline: str
    text: str = ''


@dataclass(frozen=True, eq=False)
class Record:
    """A finished run; `facts` maps a heading to names and values (parameters, versions, ...)."""

    title: str
    verdict: Verdict
    facts: Mapping[str, Mapping[str, Scalar]] = field(default_factory=dict)
    series: Mapping[str, Series] = field(default_factory=dict)
    events: Sequence[Event] = ()
    pictures: Sequence[Picture] = ()
    paths: Sequence[Path] = ()
    image_size: tuple[int, int] = (0, 0)

    @property
    def origin(self) -> Stamp:
        """Return the earliest time of all, ns: the zero of every figure's axis."""
        first = [int(series.times[0]) for series in self.series.values() if len(series.times)]
        first += [event.stamp for event in self.events]
        return min(first, default=0)

    @property
    def end(self) -> Stamp:
        """Return the latest time of all, ns."""
        last = [int(series.times[-1]) for series in self.series.values() if len(series.times)]
        last += [event.stamp for event in self.events]
        return max(last, default=0)

    def picture(self, name: str) -> Picture | None:
        """Return the first picture of a name, or None."""
        return next((picture for picture in self.pictures if picture.name == name), None)

    def digest(self) -> str:
        """Return a short hash of everything in the record: the same run, the same word."""
        return hashlib.sha256(to_json(self).encode()).hexdigest()[:12]


class Recorder:
    """Collects a run as it happens; `record` closes it."""

    def __init__(self, title: str) -> None:
        self.title = title
        self.facts: dict[str, dict[str, Scalar]] = {}
        self.events: list[Event] = []
        self.pictures: list[Picture] = []
        self.image_size = (0, 0)
        self._units: dict[str, tuple[str, tuple[str, ...]]] = {}
        self._rows: dict[str, list[tuple[Stamp, tuple[float, ...]]]] = {}
        self._seen: dict[int, list[tuple[Stamp, float, float]]] = {}
        self._goals: dict[int, Floats] = {}

    def declare(self, name: str, unit: str, *labels: str) -> None:
        """Announce a series before its first `note`."""
        self._units[name] = unit, labels
        self._rows.setdefault(name, [])

    def note(self, name: str, stamp: Stamp, *values: float) -> None:
        """Add one row to a declared series; rows may come out of order."""
        self._rows[name].append((stamp, tuple(map(float, values))))

    def recent(self, name: str, count: int) -> list[float]:
        """Return the first column of the last rows that were noted."""
        return [values[0] for _, values in self._rows[name][-count:]]

    def turn(self, event: Event) -> None:
        """Add an event when state or reason differ from the last one's."""
        last = self.events[-1] if self.events else None
        if last is None or (last.state, last.reason) != (event.state, event.reason):
            self.events.append(event)

    def points(self, stamp: Stamp, ids: npt.ArrayLike, pixels_uv: npt.ArrayLike,
               goal_uv: npt.ArrayLike) -> None:
        """Add where the goal points `ids` (N,) were seen: pixels (N, 2), and their goal (N, 2)."""
        for ident, (u, v), goal in zip(np.asarray(ids), np.asarray(pixels_uv),
                                       np.asarray(goal_uv), strict=True):
            self._seen.setdefault(int(ident), []).append((stamp, float(u), float(v)))
            self._goals[int(ident)] = np.array(goal, np.float64)

    def record(self, verdict: Verdict) -> Record:
        """Return everything so far, in order of time."""
        series = {}
        for name, rows in self._rows.items():
            if rows:
                rows = sorted(rows, key=lambda row: row[0])
                unit, labels = self._units[name]
                series[name] = Series(unit, labels, np.array([row[0] for row in rows], np.int64),
                                      np.array([row[1] for row in rows]))
        paths = [self._path(ident) for ident in sorted(self._seen)]
        return Record(self.title, verdict, {k: dict(v) for k, v in self.facts.items()}, series,
                      sorted(self.events, key=lambda event: event.stamp),
                      tuple(self.pictures), paths, self.image_size)

    def _path(self, ident: int) -> Path:
        rows = sorted(self._seen[ident])
        return Path(ident, self._goals[ident], np.array([row[0] for row in rows], np.int64),
                    np.array([row[1:] for row in rows]))


def to_json(record: Record) -> str:
    """Return a record as JSON text: nine significant digits, null for what is not finite."""
    page = {
        'format': FORMAT, 'title': record.title,
        'verdict': {'ok': record.verdict.ok, 'headline': record.verdict.headline,
                    'text': record.verdict.text},
        'facts': {heading: dict(values) for heading, values in record.facts.items()},
        'series': {name: {'unit': series.unit, 'labels': list(series.labels),
                          'times': series.times.tolist(), 'values': _plain(series.values)}
                   for name, series in record.series.items()},
        'events': [[event.stamp, event.state, event.reason, event.text]
                   for event in record.events],
        'pictures': [[picture.name, picture.stamp, picture.caption,
                      base64.b64encode(picture.data).decode()] for picture in record.pictures],
        'paths': [[path.ident, _plain(path.goal_uv), path.times.tolist(), _plain(path.pixels_uv)]
                  for path in record.paths],
        'image_size': list(record.image_size)}
    return json.dumps(page, separators=(',', ':'), allow_nan=False) + '\n'


def from_json(text: str) -> Record:
    """Return the record of a JSON text.

    Raises
    ------
    ValueError
        One sentence, for anything that `to_json` would not write.
    """
    try:
        page = json.loads(text)
        if not isinstance(page, dict) or page.get('format') != FORMAT:
            raise ValueError(f'expected a record of format {FORMAT}')
        series = {str(name): Series(str(item['unit']), tuple(map(str, item['labels'])),
                                    np.array(item['times'], np.int64),
                                    _array(item['values'], (-1, len(item['labels']))))
                  for name, item in page['series'].items()}
        paths = [Path(int(ident), _array(goal, (2,)), np.array(times, np.int64),
                      _array(pixels, (-1, 2))) for ident, goal, times, pixels in page['paths']]
        width, height = map(int, page['image_size'])
        return Record(
            str(page['title']), Verdict(**page['verdict']),
            {str(heading): dict(values) for heading, values in page['facts'].items()}, series,
            [Event(int(stamp), *map(str, words)) for stamp, *words in page['events']],
            [Picture(str(name), int(stamp), str(caption), base64.b64decode(data))
             for name, stamp, caption, data in page['pictures']], paths, (width, height))
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError) as error:
        raise ValueError(f'record: expected what a run wrote, got {error!s:.200}') from error


def save(record: Record, path: str | pathlib.Path) -> None:
    """Write a record as one JSON file."""
    pathlib.Path(path).write_text(to_json(record), encoding='utf-8')


def load(path: str | pathlib.Path) -> Record:
    """Return the record of a file; ValueError naming the file for anything else."""
    path = pathlib.Path(path)
    try:
        if path.stat().st_size > MOST_BYTES:
            raise ValueError(f'expected at most {MOST_BYTES} bytes, got {path.stat().st_size}')
        return from_json(path.read_text(encoding='utf-8'))
    except (OSError, ValueError) as error:
        raise ValueError(f'{path}: {error}') from error


def _plain(values: Floats) -> typing.Any:
    """Return nested lists of nine significant digits, None for what is not finite."""
    if values.ndim > 1:
        return [_plain(row) for row in values]
    return [float(f'{value:.9g}') if math.isfinite(value) else None for value in values.tolist()]


def _array(rows: typing.Any, shape: tuple[int, ...]) -> Floats:
    return np.array(rows, dtype=np.float64).reshape(shape)
