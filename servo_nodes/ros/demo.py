# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""`servo_demo`: watch a camera find its way back to a taught view, over real ROS 2 processes.

Nothing here reaches a robot: the three nodes run on a domain of their own, discovery stays on this
machine, and the camera and the arm are simulated.
"""

from __future__ import annotations

import argparse
import contextlib
import importlib.util
import json
import math
import os
import pathlib
import platform
import random
import signal
import sys
import time
import typing
from collections.abc import Iterator, Sequence
from importlib import metadata

from servo_nodes import __version__
from servo_nodes.report import page, record
from servo_nodes.report.drawing import MissingExtra
from servo_nodes.ros.demo_processes import Children, Trouble, free_domain, isolated

if typing.TYPE_CHECKING:
    from servo_nodes.ros.demo_run import Outcome, Start

GOOD, BAD, UNUSABLE = 0, 1, 2
STOPPED = 130
LINE_PERIOD_S, SPARSE_PERIOD_S = 0.1, 1.0
_NEEDED = {
    'rosbags': "pip install 'servo_nodes[bags]'",
    'matplotlib': "pip install 'servo_nodes[report]', or apt install python3-matplotlib",
    'rclpy': "source a ROS 2 installation, or pip install 'servo_nodes[standalone]'"}
_PACKAGES = ('numpy', 'opencv-python-headless', 'opencv-python', 'scipy',
             'transforms3d', 'matplotlib')


class Words:
    """What the reader sees: lines, and on a terminal one line that is always up to date."""

    def __init__(self, stream: typing.TextIO) -> None:
        self._stream = stream
        self._live = stream.isatty()
        self._width = 0
        self._shown = -math.inf

    def say(self, line: str) -> None:
        """Write a line that stays."""
        self._wipe()
        print(line, file=self._stream, flush=True)

    def show(self, line: str) -> None:
        """Show the moment: in place on a terminal, now and then elsewhere."""
        period = LINE_PERIOD_S if self._live else SPARSE_PERIOD_S
        if time.monotonic() - self._shown < period:
            return
        self._shown = time.monotonic()
        if not self._live:
            print(line, file=self._stream, flush=True)
            return
        self._stream.write('\r' + line.ljust(self._width))
        self._stream.flush()
        self._width = len(line)

    def _wipe(self) -> None:
        if self._width:
            self._stream.write('\r' + ' ' * self._width + '\r')
            self._width = 0


def main(argv: Sequence[str] | None = None) -> None:
    """Run the demo and exit: 0 came home, 1 did not, 2 could not be run."""
    signal.signal(signal.SIGTERM, _interrupt)
    sys.exit(run(argv))


def run(argv: Sequence[str] | None = None) -> int:
    """Run the demo; return the exit code."""
    options = _options(argv)
    words = Words(sys.stderr if options.json else sys.stdout)
    try:
        for package, remedy in _NEEDED.items():
            if package != 'rosbags' or options.bag is not None:
                _require(package, remedy)
        return _demonstrate(options, words)
    except (Trouble, MissingExtra) as error:
        print(f'servo_demo: {error}', file=sys.stderr)
        for line in getattr(error, 'log', ()):
            print(f'    {line}', file=sys.stderr)
        return UNUSABLE
    except OSError as error:
        print(f'servo_demo: --out {options.out}: expected a place to write, got {error}',
              file=sys.stderr)
        return UNUSABLE
    except KeyboardInterrupt:
        words.say('Stopped; the nodes are gone.')
        return STOPPED


def _options(argv: Sequence[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog='servo_demo', description='Teach a simulated camera a view, move it away, and watch '
        'the loop bring it back, over real ROS 2 processes that nobody else can reach.',
        epilog='Exit codes: 0 it came home, 1 it did not, 2 it could not be run.')
    parser.add_argument('--out', type=pathlib.Path, default=pathlib.Path('servo_demo_out'),
                        metavar='FOLDER', help='where report.html, record.json, the goal and the '
                        'logs go (default: %(default)s)')
    parser.add_argument('--seed', type=_seed, default=1, metavar='N', help='draws the wear of the '
                        'plate and the noise of the camera (default: %(default)s)')
    parser.add_argument('--start', type=float, nargs=6, metavar=('X', 'Y', 'Z', 'RX', 'RY', 'RZ'),
                        help='where the camera starts, from where it was taught: right, down, '
                        'forward in m, rotation vector in degrees (default: 0.05 -0.04 -0.10 6 -5 '
                        '20)')
    parser.add_argument('--timeout', type=_seconds, default=30.0, metavar='S',
                        help='seconds it may take to come home (default: %(default)g)')
    parser.add_argument('--domain', type=int, choices=range(102), metavar='0..101',
                        help='ROS domain (default: one that is free on this machine)')
    parser.add_argument('--fault', action='append', choices=('occlusion', 'stall', 'freeze'),
                        default=[], help='watch it stop: cover the lens, let the camera fall '
                        'silent, or repeat its last image, for 1 s; may be given several times')
    parser.add_argument('--bag', type=pathlib.Path, metavar='FOLDER', help='record topics and '
                        'parameters there as a rosbag2 recording (needs the package rosbags)')
    parser.add_argument('--json', action='store_true', help='one JSON object on standard output, '
                        'words on standard error')
    options = parser.parse_args(argv)
    if options.start is not None and not all(map(math.isfinite, options.start)):
        parser.error(f'--start: expected six finite numbers, got {options.start}')
    return options


def _demonstrate(options: argparse.Namespace, words: Words) -> int:
    options.out.mkdir(parents=True, exist_ok=True)
    rng = random.Random()
    domain = free_domain(rng) if options.domain is None else options.domain
    environment = isolated(os.environ, domain) | {
        'ROS_LOG_DIR': str((options.out / 'logs' / 'ros').resolve())}
    os.environ.clear()
    os.environ.update(environment)
    from servo_nodes.ros.demo_run import Start
    start = Start() if options.start is None else Start(
        tuple(options.start[:3]), tuple(options.start[3:]))
    words.say(page.CAUTIONS)
    words.say('This demo moves no robot: camera and arm are simulated, and no other machine can '
              f'reach them (domain {domain}, this machine only).\n')
    recorder = record.Recorder('servo_demo: back to the filler flap of a tram')
    namespace = f'servo_demo_{rng.randrange(16 ** 8):08x}'
    outcome = _play(options, words, start, recorder, namespace=namespace, environment=environment)
    finished = recorder.record(_verdict(outcome))
    words.say(f'\n{finished.verdict.headline} {finished.verdict.text}')
    record.save(finished, options.out / 'record.json')
    page.write(finished, options.out / 'report.html')
    words.say(f'Report: {options.out / "report.html"}')
    if options.json:
        print(json.dumps(_result(outcome, options, start)))
    return GOOD if outcome.good else BAD


def _play(options: argparse.Namespace, words: Words, start: Start, recorder: record.Recorder, *,
          namespace: str, environment: dict[str, str]) -> Outcome:
    from servo_nodes.ros.demo_run import HOME_DISTANCE_M, Run
    from servo_nodes.ros.demo_watch import QOS, Watch
    with _own_signals(), Children(namespace=namespace, environment=environment,
                                  logs=options.out / 'logs') as children:
        children.start('simulator', {'seed': options.seed, 'scene.seed': options.seed})
        children.start('tracker', {'teach.distance': HOME_DISTANCE_M,
                                   'goal.folder': str((options.out / 'goal').resolve())})
        children.start('controller', {})
        watch, bag = Watch(namespace, recorder, children.check), None
        try:
            if options.bag is not None:
                from servo_nodes.ros.demo_bag import Bag
                bag = Bag(options.bag)
                bag.listen(watch.node, QOS)
            outcome = Run(watch, start, faults=options.fault, timeout=options.timeout, bag=bag,
                          say=words.say, show=words.show).play()
        finally:
            watch.close()
            if bag is not None:
                bag.close()
    recorder.facts.update(_facts(outcome, options, start))
    return outcome


@contextlib.contextmanager
def _own_signals() -> Iterator[None]:
    """Keep the middleware from ending its context on a signal: we end our children first."""
    import rclpy
    from rclpy.signals import SignalHandlerOptions
    rclpy.init(args=[], signal_handler_options=SignalHandlerOptions.NO)
    try:
        yield
    finally:
        rclpy.try_shutdown()


def _verdict(outcome: Outcome) -> record.Verdict:
    true = (f'{outcome.position_error_mm:.3f} mm and {outcome.angle_error_deg:.4f} deg from where '
            f'it was taught, by the true pose of the simulated camera; {outcome.error_px:.3f} px '
            'in the image.')
    if outcome.settle_s is not None:
        from servo_nodes.ros.demo_run import MOST_DEG, MOST_MM
        text = f'It settled {outcome.settle_s:.1f} s after it was engaged, {true}'
        if outcome.stops:
            times = 'once' if outcome.stops == 1 else f'{outcome.stops} times'
            text += f' It stopped {times} on the way, and moved on by itself.'
        if outcome.good:
            return record.Verdict(True, 'The camera came back to the view it was taught.', text)
        return record.Verdict(False, 'The camera settled, but not where it was taught.',
                              f'{text} At most {MOST_MM} mm and {MOST_DEG} deg are expected.')
    why = f'{outcome.reason.replace("_", " ")}: {outcome.detail}. ' if outcome.detail else ''
    return record.Verdict(False, 'The camera did not come back to the view it was taught.',
                          f'At the end the controller was {outcome.state}. {why}It was {true}')


def _facts(outcome: Outcome, options: argparse.Namespace,
           start: Start) -> dict[str, dict[str, record.Scalar]]:
    result: dict[str, record.Scalar] = {
        'true position error': f'{outcome.position_error_mm:.3f} mm',
        'true angle error': f'{outcome.angle_error_deg:.4f} deg',
        'error in the image': f'{outcome.error_px:.3f} px'}
    if outcome.settle_s is not None:
        result = {'from engaging to settled': f'{outcome.settle_s:.1f} s', **result}
    return {'Result': result, 'Run': {'start': start.words(), 'seed': options.seed,
                                      'faults': ', '.join(options.fault) or 'none',
                                      'platform': platform.platform(terse=True)},
            'Versions': {'servo_nodes': __version__, 'python': platform.python_version(),
                         **_versions()},
            **{f'Parameters of the {node}': values
               for node, values in outcome.parameters.items()}}


def _versions() -> dict[str, str]:
    found = {}
    for package in _PACKAGES:
        with contextlib.suppress(metadata.PackageNotFoundError):
            found[package] = metadata.version(package)
    return found


def _result(outcome: Outcome, options: argparse.Namespace, start: Start) -> dict[str, object]:
    figures = {name: getattr(outcome, name) for name in (
        'position_error_mm', 'angle_error_deg', 'error_px')}
    return {
        'good': outcome.good, 'settled': outcome.settled, 'settle_s': outcome.settle_s,
        **{name: value if math.isfinite(value) else None for name, value in figures.items()},
        'state': outcome.state, 'reason': outcome.reason, 'stops': outcome.stops,
        'seed': options.seed, 'start': [*start.translation, *start.rotation_deg],
        'faults': options.fault, 'report': str(options.out / 'report.html')}


def _require(package: str, remedy: str) -> None:
    if importlib.util.find_spec(package) is None:
        raise MissingExtra(f'expected the package {package}, got none; {remedy}')


def _seed(text: str) -> int:
    value = int(text)
    if not 0 <= value < 2 ** 31:
        raise argparse.ArgumentTypeError(f'expected 0 to {2 ** 31 - 1}, got {text}')
    return value


def _seconds(text: str) -> float:
    value = float(text)
    if not 1.0 <= value <= 3600.0:
        raise argparse.ArgumentTypeError(f'expected 1 to 3600 s, got {text}')
    return value


def _interrupt(number: int, frame: object) -> None:
    raise KeyboardInterrupt
