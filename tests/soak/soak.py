# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Run the simulated loop for a long time and judge it: memory, gaps, stray commands.

    python tests/soak/soak.py --minutes 60

Teaches once, then goes away, engages, settles, disengages, again and again. Prints one JSON
object; exits 1 when a process grew by 5 MB or more after the first minute, or when a gap of the
commands within an engagement exceeded two periods.
"""

from __future__ import annotations

import argparse
import json
import pathlib
import sys
import time

import numpy as np

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[2]))

from servo_nodes.ros.rig import Rig
from servo_nodes.ros.trial import AWAY, FAR, Trial

RATE = 50.0
MOST_GROWTH_MB = 5.0


def resident_mb(pid: int) -> float:
    """Return the resident memory of a process, MB."""
    for line in pathlib.Path(f'/proc/{pid}/status').read_text().splitlines():
        if line.startswith('VmRSS:'):
            return int(line.split()[1]) / 1024
    raise ValueError(f'process {pid}: expected VmRSS in its status, got none')


def main() -> int:
    """Run, print, judge."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument('--minutes', type=float, default=60.0)
    parser.add_argument('--domain', type=int, default=78)
    options = parser.parse_args()
    end = time.monotonic() + 60.0 * options.minutes
    gaps, memory, runs, first = [], {}, 0, {}
    with Rig(options.domain) as rig:
        trial = Trial(rig, controller={'rate': RATE})
        trial.teach()
        warm = time.monotonic() + min(60.0, 20.0 * options.minutes)
        while time.monotonic() < end:
            trial.observer.commands.clear()
            trial.observer.states[:-1] = []
            at = time.monotonic_ns()
            trial.go(FAR if runs % 2 else AWAY)
            rig.until(lambda: trial.observer.state in ('settled', 'faulted'), 60.0)
            gaps.append(trial.observer.gaps(at, time.monotonic_ns()))
            trial.stop()
            rig.watch(0.6)
            runs += 1
            memory = {node: resident_mb(child.pid) for node, child in trial.nodes.items()}
            if not first and time.monotonic() > warm:
                first = memory
    every = np.concatenate(gaps)
    growth = {node: memory[node] - first.get(node, memory[node]) for node in memory}
    result = {'minutes': options.minutes, 'runs': runs, 'commands': int(every.size),
              'longest_gap_s': float(every.max()), 'p99_gap_s': float(np.quantile(every, 0.99)),
              'growth_mb': growth, 'memory_mb': memory}
    print(json.dumps(result))
    return int(result['longest_gap_s'] > 2.0 / RATE or max(growth.values()) >= MOST_GROWTH_MB)


if __name__ == '__main__':
    sys.exit(main())
