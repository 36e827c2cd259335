# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""`servo_bench AREA`: measure control, tracking or simulation, and judge the figures.

Figures that are time are ratios against a bare reference measured in the same run. The exit code
is 0 when every bound holds, 1 when one does not, 2 when the request cannot be understood.
"""

from __future__ import annotations

import argparse
import importlib
import json
import math
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class Bound:
    """What a figure has to keep: `low` <= figure <= `high`."""

    low: float = -math.inf
    high: float = math.inf

    def holds(self, figure: float) -> bool:
        """Return whether `figure` is within; one that is not a number is not."""
        return self.low <= figure <= self.high

    def __str__(self) -> str:
        if math.isinf(self.low):
            return f'at most {self.high:g}'
        return f'at least {self.low:g}' if math.isinf(self.high) else (
            f'{self.low:g} to {self.high:g}')


BOUNDS: dict[str, dict[str, Bound]] = {
    'control': {
        'command_over_lstsq': Bound(high=5.0),
        'batch_over_single': Bound(low=60.0),
        'blocks_grown': Bound(high=200.0),
    },
    'tracking': {
        'median_error_px': Bound(high=0.04),
        'drift_error_px': Bound(high=0.05),
        'false_acquisitions': Bound(high=0.0),
        'acquired_share': Bound(low=0.99),
        'return_images': Bound(high=3.0),
        'look_over_opencv': Bound(high=1.25),
        'acquire_over_opencv': Bound(high=1.25),
    },
    'simulation': {'render_over_warp': Bound(high=1.5)},
}


def verdicts(area: str, figures: Mapping[str, float]) -> dict[str, str]:
    """Return one sentence for each bound of `area` that is broken, by the figure's name."""
    broken = {}
    for name, bound in BOUNDS[area].items():
        figure = figures.get(name)
        if figure is None or not bound.holds(figure):
            broken[name] = f'{name}: expected {bound}, got {"none" if figure is None else figure}'
    return broken


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line tool and return its exit code."""
    parser = argparse.ArgumentParser(prog='servo_bench', description=__doc__.split('\n\n')[0])
    parser.add_argument('area', choices=sorted(BOUNDS), help='what to measure')
    parser.add_argument('--seed', type=int, default=0, help='seed of everything random')
    parser.add_argument('--out', type=Path, metavar='FOLDER',
                        help='also write the figures to bench_AREA.json in this folder')
    parser.add_argument('--json', action='store_true',
                        help='print one JSON object on standard output')
    options = parser.parse_args(arguments)
    if options.seed < 0:
        print(f'seed: expected 0 or more, got {options.seed}', file=sys.stderr)
        return 2
    print(f'measuring {options.area}; leave the machine alone meanwhile', file=sys.stderr)
    bench = importlib.import_module(f'servo_nodes.offline.bench_{options.area}')
    figures: dict[str, float] = bench.measure(options.seed)
    broken = verdicts(options.area, figures)
    text = json.dumps(figures, indent=2)
    if options.out is not None:
        try:
            options.out.mkdir(parents=True, exist_ok=True)
            (options.out / f'bench_{options.area}.json').write_text(text + '\n', encoding='utf-8')
        except OSError as error:
            print(f'out: expected a folder that can be written, got {options.out}: '
                  f'{error.strerror}', file=sys.stderr)
            return 2
    if options.json:
        print(text)
    for name, figure in figures.items():
        bound = BOUNDS[options.area].get(name)
        words = '' if bound is None else f' ({bound})'
        print(f'{name:28} {figure:10.4g}{words}', file=sys.stderr)
    for sentence in broken.values():
        print(sentence, file=sys.stderr)
    return 1 if broken else 0


if __name__ == '__main__':
    sys.exit(main())
