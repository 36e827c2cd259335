# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""`servo_replay`: what happened, and what this version would have done; from a recording alone.

No ROS is needed and nothing is started. The same recording and settings leave the same bytes.
"""

from __future__ import annotations

import argparse
import json
import math
import pathlib
import sys
import time
import typing
from collections.abc import Sequence

from servo_nodes.offline import junit, verdict, verdict_against
from servo_nodes.offline.bags import Bag
from servo_nodes.offline.replay_goal import Request
from servo_nodes.offline.replay_run import Replay, replayed
from servo_nodes.offline.verdict import Finding
from servo_nodes.report import page
from servo_nodes.report import record as records
from servo_nodes.report.drawing import MissingExtra
from servo_nodes.values import SECOND_NS, Stamp

GOOD, BAD, UNUSABLE = 0, 1, 2
_PROGRESS_S = 1.0


class Progress:
    """Says on standard error how far the replay is; measures how fast it went."""

    def __init__(self, start: Stamp, end: Stamp) -> None:
        self._start, self._length = start, max(end - start, 1)
        self._begun = self._said = time.monotonic()

    def __call__(self, now: Stamp) -> None:
        """Take the time, ns, that the recording has come to."""
        wall = time.monotonic()
        if wall - self._said >= _PROGRESS_S:
            self._said = wall
            done = max(0, now - self._start) / SECOND_NS
            print(f'{done:9.1f} s of {self._length / SECOND_NS:.1f} s', file=sys.stderr,
                  flush=True)

    def end(self) -> None:
        """Say how fast it went."""
        wall, length = time.monotonic() - self._begun, self._length / SECOND_NS
        print(f'{length:.1f} s replayed in {wall:.2f} s, {length / max(wall, 1e-9):.0f} times as '
              'fast as they passed', file=sys.stderr)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the tool; return its exit code: 0 good, 1 the verdict is bad, 2 unusable input."""
    options = _parser().parse_args(arguments)
    try:
        return _main(options)
    except (ValueError, OSError) as error:
        print(f'servo_replay: {error}', file=sys.stderr)
        if options.json:
            print(json.dumps({'tool': 'servo_replay', 'exit': UNUSABLE, 'error': str(error)}))
        return UNUSABLE


def _main(options: argparse.Namespace) -> int:
    limits = verdict.thresholds_from_file(options.thresholds)
    other = None if options.against is None else verdict_against.other_from_path(options.against)
    bag = Bag(options.bag)
    request = Request(goal=options.goal, teach=options.teach, params=options.params,
                      topics=dict(options.topics), thresholds=limits, seed=options.seed)
    progress = Progress(bag.start, bag.end)
    try:
        replay = replayed(bag, request, progress)
    except ValueError as error:
        if bag.damages:
            raise ValueError(f'{"; ".join(bag.damages)}; a replay of these is not possible: '
                             f'{error}') from error
        raise
    progress.end()
    findings = list(replay.findings)
    if other is not None:
        findings += verdict_against.compared(replay.record, other, limits.against)
    ok = verdict.passed(findings)
    code = UNUSABLE if bag.damages else GOOD if ok else BAD
    result = _result(bag, replay, findings, code)
    if options.out is not None:
        _write(options.out, replay, findings, result, bag)
    _say(replay, findings, code, sys.stderr if options.json else sys.stdout)
    for sentence in bag.damages:
        print(f'servo_replay: {sentence}', file=sys.stderr)
    if options.json:
        print(json.dumps(result, indent=1, allow_nan=False))
    return code


def _result(bag: Bag, replay: Replay, findings: Sequence[Finding],
            code: int) -> dict[str, typing.Any]:
    """Return everything as plain values; no clock and no path of a machine but the given one."""
    log = replay.log
    return {
        'tool': 'servo_replay', 'exit': code, 'ok': verdict.passed(findings),
        'caution': verdict.CAUTION, 'bag': bag.path.name, 'views_from': replay.mode,
        'duration_s': (bag.end - bag.start) / SECOND_NS, 'messages': bag.count,
        'topics': {topic: {'type': bag.kinds[topic], 'messages': bag.counts[topic]}
                   for topic in sorted(bag.kinds)},
        'parts': dict(sorted(replay.parts.items())),
        'findings': [{'name': item.name, 'ok': item.ok, 'value': _number(item.value),
                      'limit': _number(item.limit), 'unit': item.unit, 'text': item.text}
                     for item in findings],
        'stops': [{'at_s': (stop.start - bag.start) / SECOND_NS, 'state': stop.state,
                   'reason': stop.reason, 'detail': stop.detail, 'reaction_s': stop.reaction,
                   'lasted_s': None if stop.end is None else (stop.end - stop.start) / SECOND_NS}
                  for stop in log.stops],
        'views': log.views, 'ticks': log.ticks, 'compared': log.compared,
        'commands': log.digest, 'record': replay.record.digest(),
        'damages': list(bag.damages), 'notes': list(replay.notes)}


def _number(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _write(folder: pathlib.Path, replay: Replay, findings: Sequence[Finding],
           result: dict[str, typing.Any], bag: Bag) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    records.save(replay.record, folder / 'record.json')
    (folder / 'verdict.json').write_text(json.dumps(result, indent=1, allow_nan=False) + '\n',
                                         encoding='utf-8')
    (folder / 'junit.xml').write_text(
        junit.text_from_findings(bag.path.name, findings, bag.damages), encoding='utf-8')
    try:
        page.write(replay.record, folder / 'page.html')
    except MissingExtra as error:
        print(f'servo_replay: no page: {error}', file=sys.stderr)


def _say(replay: Replay, findings: Sequence[Finding], code: int, stream: typing.TextIO) -> None:
    print(verdict.table(findings), file=stream)
    for note in replay.notes:
        print(f'note: {note}', file=stream)
    words = {GOOD: 'passes', BAD: 'FAILS', UNUSABLE: 'damaged: read as far as it goes'}[code]
    print(f'{replay.record.title}, views from {replay.mode}: {words}. {verdict.CAUTION}',
          file=stream)


def _topic(text: str) -> tuple[str, str]:
    part, sign, topic = text.partition('=')
    if not sign or not part or not topic:
        raise argparse.ArgumentTypeError(f'expected PART=TOPIC, got {text!r}')
    return part, topic


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog='servo_replay', description='Replay a recording through the tracker and a shadow '
        'controller, compare its commands with the recorded ones, and judge it.')
    path = pathlib.Path
    parser.add_argument('bag', type=path, metavar='BAG',
                        help='rosbag2 folder, or one .mcap or .db3 file')
    parser.add_argument('--goal', type=path, metavar='FOLDER',
                        help='taught view; the images are tracked anew instead of using features')
    parser.add_argument('--teach', default='', metavar='WHEN',
                        help='take the view from the recording: first, last, or seconds')
    parser.add_argument('--params', type=path, nargs='+', default=[], metavar='YAML',
                        help='ROS parameter files; later ones win, and all over recorded ones')
    parser.add_argument('--topics', type=_topic, nargs='+', default=[], metavar='PART=TOPIC',
                        help='name a topic: image, compressed, depth, camera_info, features, '
                        'command, state, halt, heartbeat, clock, parameters')
    parser.add_argument('--thresholds', type=path, metavar='YAML', help='what is judged')
    parser.add_argument('--against', type=path, metavar='OTHER',
                        help='folder (--out) or record of another replay to compare with')
    parser.add_argument('--out', type=path, metavar='FOLDER',
                        help='write page.html, record.json, verdict.json and junit.xml there')
    parser.add_argument('--seed', type=int, default=0, help='of the tracker, default 0')
    parser.add_argument('--json', action='store_true',
                        help='one JSON object on standard output, words on standard error')
    return parser
