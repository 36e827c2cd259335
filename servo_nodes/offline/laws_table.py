# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Write the comparison of all laws into the documentation.

    python -m servo_nodes.offline.laws_table

The table stands between two markers; everything else in the file is left alone. With `--check`
nothing is written and the exit code says whether the file is up to date.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from servo_nodes.control.law_settings import DampingSettings, LawSettings
from servo_nodes.offline import battery
from servo_nodes.offline.battery import Outcome

BEGIN, END = '<!-- laws: begin -->', '<!-- laws: end -->'
BARE = LawSettings(damping=DampingSettings(below=0.0))
LAWS = {
    **{f'points, {choice}': replace(BARE, interaction=choice)
       for choice in ('current', 'goal', 'mean', 'blend')},
    **{kind: replace(BARE, kind=kind, interaction='current')
       for kind in ('polar', 'partitioned', 'hybrid', 'pose')},
}


def table() -> str:
    """Run every law on every task, directly and along a planned path; return Markdown."""
    starts = battery.starts()
    rows = {name: (battery.run(starts, settings), battery.run(starts, settings, planned=True))
            for name, settings in LAWS.items()}
    lines = [
        f'Gain {battery.GAIN:g} 1/s, samples of {battery.STEP:g} s, at most {battery.SAMPLES}; '
        f'square of {2 * battery.HALF_SIDE:g} m, goal at {battery.DISTANCE:g} m, '
        f'f = {battery.FOCAL_PX:.0f} px; exact motion, true depths, no caps, no damping.',
        f'Samples until the worst point is within {battery.HOME_PX:g} px / largest distance of a '
        'point from the image centre, px / of the camera from its goal, m.',
        'Far rolls: with `current` the camera retreats, with `goal` it meets the target, `mean` '
        'loses rank and `blend` its speed at 180°. The live loop plans a path there by itself.',
    ]
    for k, task in enumerate(battery.TASKS):
        lines += ['', f'| {task.words} | directly | along a planned path |', '|---|---|---|']
        lines += [f'| {name} | {_cell(direct[k])} | {_cell(planned[k])} |'
                  for name, (direct, planned) in rows.items()]
    failures = {name: tuple(sum(outcome.failed for outcome in found) for found in both)
                for name, both in rows.items()}
    lines += ['', f'| failures in {len(battery.TASKS)} tasks | directly | along a planned path |',
              '|---|---|---|']
    lines += [f'| {name} | {direct} | {planned} |' for name, (direct, planned) in failures.items()]
    return '\n'.join(lines)


def _cell(outcome: Outcome) -> str:
    if outcome.failed:
        return '**fails**'
    return f'{outcome.samples} / {outcome.feature_px:.0f} / {outcome.camera:.2f}'


def replaced(text: str, fresh: str) -> str:
    """Return `text` with everything between the markers replaced.

    Raises
    ------
    ValueError
        When the markers are not there, once each and in order.
    """
    if text.count(BEGIN) != 1 or text.count(END) != 1 or text.index(BEGIN) > text.index(END):
        raise ValueError(f'expected one {BEGIN} before one {END}, got '
                         f'{text.count(BEGIN)} and {text.count(END)}')
    return text[:text.index(BEGIN) + len(BEGIN)] + '\n' + fresh + '\n' + text[text.index(END):]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line tool and return its exit code."""
    parser = argparse.ArgumentParser(prog='laws_table', description=__doc__.split('\n\n')[0])
    parser.add_argument('file', nargs='?', type=Path, default=Path('DEVELOPERS.md'))
    parser.add_argument('--check', action='store_true', help='write nothing, compare only')
    options = parser.parse_args(arguments)
    try:
        before = options.file.read_text(encoding='utf-8')
        after = replaced(before, table())
    except (OSError, ValueError) as error:
        print(f'{options.file}: {error}', file=sys.stderr)
        return 2
    if options.check:
        return 0 if before == after else 1
    options.file.write_text(after, encoding='utf-8')
    return 0


if __name__ == '__main__':
    sys.exit(main())
