# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""servo_drill: run the fault table on this machine, against real processes, by real means.

Teams run it before they trust the loop. Each row injects one fault while the camera moves, several
times, and reports the worst: seconds to exact zero at a subscriber in another process, or what the
row says instead.
"""

from __future__ import annotations

import argparse
import json
import math
import pathlib
import sys
import typing

import numpy as np

from servo_nodes.ros import drill_messages as messages
from servo_nodes.ros import drill_operator as operator
from servo_nodes.ros import drill_page
from servo_nodes.ros import drill_processes as processes
from servo_nodes.ros.drill_bench import PERIOD_S, Bench, Measured, Row
from servo_nodes.ros.faketime import library
from servo_nodes.ros.rig import Rig

HOLD_S = 0.25
AT_ONCE_S = 2.0 * PERIOD_S + 0.03
GAP_S = 2.0 * PERIOD_S


class Fault(typing.NamedTuple):
    """One row: what is done, what must follow and within what, and the trial of it.

    `world` is `plain`, `simulated` (the simulator leads the time) or `faked` (libfaketime).
    """

    ident: str
    fault: str
    reaction: str
    bound_s: float
    trial: Row
    world: str = 'plain'


TABLE = (
    Fault('F1', 'tracker killed or frozen', 'zero', HOLD_S, processes.tracker_dies),
    Fault('F2', 'camera stops', 'zero', HOLD_S, processes.camera_stops),
    Fault('F3', 'target lost', 'zero', HOLD_S, messages.target_lost),
    Fault('F4', 'old images', 'zero', HOLD_S, messages.old_images),
    Fault('F5', 'frozen picture, new stamps', 'zero', 0.75, messages.frozen_picture),
    Fault('F6', 'repeated or backward stamps', 'dropped; zero when it lasts', HOLD_S,
          messages.repeated_stamps),
    Fault('F7', 'stamps of zero', 'time of receipt serves; goes on', 0.0, messages.zero_stamps),
    Fault('F8', 'stamps from the future, negative seconds', 'dropped; zero', HOLD_S,
          messages.future_stamps),
    Fault('F9', 'system clock set by 3 s or a day', 'largest gap of the commands', GAP_S,
          processes.system_clock, 'faked'),
    Fault('F10', '/clock stops', 'zero; resumes by itself', HOLD_S, processes.paused_time,
          'simulated'),
    Fault('F11', '/clock jumps back', 'zero at once, standby', AT_ONCE_S,
          processes.time_jumps_back, 'simulated'),
    Fault('F12', 'NaN or infinity in features', 'dropped; zero', HOLD_S, messages.not_finite),
    Fault('F13', 'calibration changes in flight', 'zero at once, latched', AT_ONCE_S,
          messages.other_camera),
    Fault('F14', 'malformed images', 'dropped; goes on', 0.0, messages.malformed_images),
    Fault('F15', 'exception in a callback', 'zeros, one traceback, exit 1', 0.15,
          processes.exception),
    Fault('F16', 'two CPU hogs', '99 % of the periods', GAP_S, processes.hogs),
    Fault('F17', 'SIGINT, SIGTERM', 'zeros last, exit 0 within 1 s', AT_ONCE_S,
          processes.asked_to_end),
    Fault('F18', 'controller killed or frozen', 'a driver that asks for the deadline is told',
          0.35, processes.killed),
    Fault('F19', 'frozen foreign listener', 'largest gap of the commands', GAP_S,
          processes.frozen_listener),
    Fault('F20', 'controller paused for a second', 'zero first', 0.0,
          processes.paused_controller),
    Fault('F21', 'node deactivated', 'zeros, then inactive', 0.15, processes.deactivated),
    Fault('F22', 'storm of bad parameters', 'all refused; largest gap of the commands', GAP_S,
          operator.bad_parameters),
    Fault('F23', 'command far above the caps', 'scaled, every message inside the caps', 0.0,
          operator.above_caps),
    Fault('F24', 'operator stop', 'zero at once, latched', AT_ONCE_S, operator.operator_stop),
    Fault('F25', 'second publisher of the command', 'zero, latched', 1.5,
          operator.second_publisher),
    Fault('F26', 'nobody listens to the command', 'fault', 1.5, operator.no_listener),
    Fault('F27', 'return after a hold', 'after three good views, from rest', 0.0,
          operator.returning),
    Fault('F28', 'divergence', 'zero, latched', 4.0, messages.diverging),
    Fault('F29', 'any order of starts', 'no stray command; engages', 1.0, processes.any_order),
)


def main(argv: list[str] | None = None) -> None:
    """Run the tool."""
    sys.exit(run(argv))


def run(argv: list[str] | None = None) -> int:
    """Run the table; return 0 when all that ran held its bound, 1 if not, 2 unusable."""
    options = _options(argv)
    known = {fault.ident: fault for fault in TABLE}
    wanted = [name.strip().upper() for name in options.rows.split(',') if name.strip()]
    strange = [name for name in wanted if name not in known]
    if strange or not 1 <= options.runs <= 1000 or not 0 <= options.domain <= 101:
        print(f'servo_drill: expected rows F1 to F29, 1 to 1000 runs and a domain up to 101, got '
              f'{", ".join(strange) or "no strange row"}, {options.runs} and {options.domain}',
              file=sys.stderr)
        return 2
    faults = [fault for fault in TABLE if not wanted or fault.ident in wanted]
    results = []
    for world in ('plain', 'simulated', 'faked'):
        chosen = [fault for fault in faults if fault.world == world]
        if chosen:
            results += _in_world(world, chosen, options)
    results.sort(key=lambda row: int(str(row['id'])[1:]))
    if options.json:
        print(json.dumps({'faults': results}))
    if options.out:
        folder = pathlib.Path(options.out)
        folder.mkdir(parents=True, exist_ok=True)
        (folder / 'drill.html').write_text(drill_page.page(results), encoding='utf-8')
        print(f'written: {folder / "drill.html"}', file=sys.stderr)
    return 0 if all(row['ok'] is not False for row in results) else 1


def _options(argv: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(prog='servo_drill', description=__doc__)
    parser.add_argument('--rows', default='', metavar='F1,F2', help='only these rows')
    parser.add_argument('--runs', type=int, default=5, help='repetitions of each row')
    parser.add_argument('--domain', type=int, default=79, help='ROS domain, which must be free')
    parser.add_argument('--seed', type=int, default=1, help='draws the orders of starts')
    parser.add_argument('--json', action='store_true', help='one JSON object on standard output')
    parser.add_argument('--out', default='', metavar='FOLDER', help='write a page there')
    return parser.parse_args(argv)


def _in_world(world: str, faults: list[Fault], options: argparse.Namespace,
              ) -> list[dict[str, object]]:
    faketime = library() if world == 'faked' else None
    if world == 'faked' and faketime is None:
        return [_skipped(fault, 'needs libfaketime (apt: faketime, pip: libfaketime)')
                for fault in faults]
    results = []
    with Rig(options.domain) as rig:
        bench = Bench(rig, np.random.default_rng(options.seed),
                      simulated_time=world == 'simulated', faketime=faketime)
        for fault in faults:
            results.append(_row(bench, fault, options.runs))
        bench.close()
    return results


def _row(bench: Bench, fault: Fault, runs: int) -> dict[str, object]:
    """Run one row; what fails to get ready is a failed run, not the end of the drill."""
    measured = []
    for number in range(runs):
        try:
            bench.ready()
            measured.append(fault.trial(bench, number))
        except TimeoutError as error:
            measured.append(Measured(math.inf, False, str(error)))
    worst = max(one.seconds for one in measured)
    bad = [one for one in measured if not (one.ok and one.seconds <= fault.bound_s)]
    said = bad[0] if bad else measured[-1]
    print(f'{fault.ident:4} {"ok " if not bad else "BAD"} {fault.fault}: worst {worst:.3f} s, '
          f'bound {fault.bound_s:.3f} s, {len(bad)} of {runs} bad ({said.note})',
          file=sys.stderr)
    return {'id': fault.ident, 'fault': fault.fault, 'reaction': fault.reaction,
            'bound_s': fault.bound_s, 'worst_s': worst if math.isfinite(worst) else None,
            'runs': runs, 'ok': not bad, 'note': said.note}


def _skipped(fault: Fault, why: str) -> dict[str, object]:
    print(f'{fault.ident:4} --- {fault.fault}: not run, {why}', file=sys.stderr)
    return {'id': fault.ident, 'fault': fault.fault, 'reaction': fault.reaction,
            'bound_s': fault.bound_s, 'worst_s': None, 'runs': 0, 'ok': None, 'note': why}
