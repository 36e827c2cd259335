# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""One replay: a recording through the tracker and a shadow controller, to a record and findings.

The tracker sees the recorded images whatever is commanded (open loop). The shadow decides at the
very times at which the recorded controller did, and its commands go nowhere but into the log.
"""

from __future__ import annotations

import platform
import typing
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from importlib import metadata

import numpy as np

from servo_nodes import __version__
from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.offline.bags import Bag
from servo_nodes.offline.bags_topics import topics_of_parts
from servo_nodes.offline.loops import Decided, Event, Handed, Kind, Looked, Loop
from servo_nodes.offline.replay_events import Recorded, Script, recorded_names
from servo_nodes.offline.replay_goal import Request, tracker_for
from servo_nodes.offline.replay_log import Log
from servo_nodes.offline.replay_pictures import Album, Ways
from servo_nodes.offline.replay_settings import Choice, chosen
from servo_nodes.offline.verdict import CAUTION, Finding, judged, passed
from servo_nodes.report.record import Path, Picture, Record, Scalar, Series, Verdict
from servo_nodes.settings import mapping_from_settings
from servo_nodes.tracking.tracker import Tracker
from servo_nodes.values import SECOND_NS, Calibration, Stamp

LOST = 0.05
_PACKAGES = ('numpy', 'opencv-python-headless', 'opencv-python', 'scipy', 'rosbags')


@dataclass(frozen=True, eq=False)
class Replay:
    """What came of it.

    Attributes
    ----------
    mode : `images` or `features`, what the views come from
    """

    record: Record
    findings: Sequence[Finding]
    log: Log
    recorded: Recorded
    mode: str
    parts: Mapping[str, str]
    notes: Sequence[str]


def replayed(bag: Bag, request: Request,
             progress: Callable[[Stamp], None] = lambda time: None) -> Replay:
    """Replay a recording.

    Raises
    ------
    ValueError
        One sentence, when the recording lacks what a replay needs, or settings, topics or goal are
        unusable.
    """
    parts = topics_of_parts(bag.kinds, bag.counts, request.topics)
    notes: list[str] = []
    choice = chosen(recorded_names(bag, parts, notes), request.params, notes)
    tracker = tracker_for(bag, parts, request, choice, notes)
    mode = 'features' if tracker is None else 'images'
    script = Script(bag, parts, choice, images=tracker is not None)
    loop = Loop(Controller(choice.controller), tracker, rectified=choice.rectified,
                paired='features' in parts)
    run = _Run(choice, progress)
    for outcome in loop.run(run.watched(script.events())):
        run.take(outcome)
    run.log.spans.end()
    notes += _notes(bag, script, run.log, parts, choice)
    findings = judged(run.log, script.recorded, request.thresholds)
    record = _record(bag, run, tracker, choice, findings, mode, notes)
    return Replay(record, findings, run.log, script.recorded, mode, parts, notes)


class _Run:
    """Spreads what the loop yields over log, album and ways."""

    def __init__(self, choice: Choice, progress: Callable[[Stamp], None]) -> None:
        self.log = Log(choice.controller.watchdog.least_points)
        self.album, self.ways = Album(), Ways()
        self.camera: Camera | None = None
        self._rectified, self._progress = choice.rectified, progress

    def watched(self, events: Iterator[Event]) -> Iterator[Event]:
        for event in events:
            self._progress(event.time)
            if event.kind is Kind.CALIBRATION and self.camera is None:
                self.camera = _camera(event.value, self._rectified)
            yield event

    def take(self, outcome: typing.Any) -> None:
        if isinstance(outcome, Looked):
            self.album.look(outcome)
            return
        if self.log.take(outcome) and isinstance(outcome, Decided):
            self.album.turn(outcome.command)
        elif isinstance(outcome, Handed):
            self.ways.add(*outcome)


def _camera(calibration: Calibration, rectified: bool) -> Camera | None:
    try:
        return Camera.from_calibration(calibration, rectified=rectified)
    except ValueError:
        return None


def _notes(bag: Bag, script: Script, log: Log, parts: Mapping[str, str],
           choice: Choice) -> list[str]:
    """Return what a reader should know that is no finding."""
    found = [*bag.notes, *([script.note] if script.note else [])]
    for part, (count, text) in sorted(script.recorded.dropped.items()):
        found.append(f'{count} messages of {part} could not be read; the first: {text}')
    if log.skipped:
        found.append(f'nothing was recorded for more than 5 s, {log.skipped} times; the rest of '
                     'each silence was left out')
    if not {'command', 'state'} & set(parts):
        found.append('neither commands nor states were recorded: the shadow was engaged as soon '
                     'as it could be')
    if log.compared and log.filled > LOST * (log.filled + log.compared):
        found.append(f'{log.filled} of {log.filled + log.compared} commands with the loop on were '
                     'not recorded: a recording that loses messages says little')
    if choice.controller.heartbeat.required and 'heartbeat' not in parts:
        found.append('heartbeat.required is true and no heartbeat was recorded')
    for told in log.answers:
        if not told.answer.ok:
            count = log.refusals[told.kind.value, told.answer.text.partition(':')[0]]
            found.append(f'{told.kind.value} was refused {count} times, first: {told.answer.text}')
    return found


def _record(bag: Bag, run: _Run, tracker: Tracker | None, choice: Choice,
            findings: Sequence[Finding], mode: str, notes: Sequence[str]) -> Record:
    log, ok = run.log, passed(findings)
    failed = [finding for finding in findings if finding.ok is False]
    headline = ('The replay passes' if ok else
                f'The replay fails: {", ".join(finding.name for finding in failed)}')
    words = [f'{finding.text[:1].upper()}{finding.text[1:]}.' for finding in failed]
    series = log.series()
    if log.first is not None:
        caps = choice.controller.caps
        series['caps'] = Series('m/s, rad/s', ('linear', 'angular'),
                                np.array([log.first, log.last], np.int64),
                                np.array([[caps.linear, caps.angular]] * 2))
    aimed = None if tracker is None else tracker.goal
    pictures: list[Picture] = run.album.close(aimed)
    camera = run.camera
    paths: list[Path] = run.ways.paths(camera)
    size = run.album.size if any(run.album.size) or camera is None else camera.size
    return Record(f'Replay of {bag.path.name}', Verdict(ok, headline, ' '.join([*words, CAUTION])),
                  _facts(bag, run, choice, findings, mode, notes), series, tuple(log.events),
                  tuple(pictures), tuple(paths), size)


def _facts(bag: Bag, run: _Run, choice: Choice, findings: Sequence[Finding], mode: str,
           notes: Sequence[str]) -> dict[str, dict[str, Scalar]]:
    log = run.log
    result: dict[str, Scalar] = {}
    if log.compared:
        result['shadow off the recording, 99 %'] = f'{1e3 * log.linear.quantile(0.99):.3g} mm/s'
    facts: dict[str, dict[str, Scalar]] = {
        'Result': result,
        'Verdict': {finding.name: finding.text for finding in findings},
        'Recording': {
            'name': bag.path.name, 'duration': f'{(bag.end - bag.start) / SECOND_NS:.3f} s',
            'messages': bag.count, 'views from': mode, 'views': log.views, 'ticks': log.ticks,
            'commands': log.digest[:16]},
        'Notes': {str(number): note for number, note in enumerate(
            [*bag.damages, *notes], 1)},
        'Versions': _versions(),
        'Controller parameters': _plain(choice.controller)}
    if mode == 'images':
        facts['Tracker parameters'] = _plain(choice.tracker)
    return {heading: values for heading, values in facts.items() if values}


def _plain(settings: object) -> dict[str, Scalar]:
    return {name: str(list(value)) if isinstance(value, tuple) else value
            for name, value in mapping_from_settings(settings).items()}


def _versions() -> dict[str, Scalar]:
    found: dict[str, Scalar] = {'servo_nodes': __version__, 'python': platform.python_version()}
    for name in _PACKAGES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    return found


