# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Write the generated parts of README.md from the code that they describe.

Run it from the project's root after a change of a setting, of the gate or of the states:

    python tests/house/readme_tables.py

A test compares the file with what this would write. A generated part stands between
`<!-- generated: NAME -->` and `<!-- end -->`.
"""

from __future__ import annotations

import functools
import re
import sys
from collections.abc import Callable
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from servo_nodes.settings import Definition, definitions  # noqa: E402

NODES = ('tracker', 'controller', 'simulator')
README = ROOT / 'README.md'
PART = re.compile(r'(<!-- generated: (?P<name>[\w ]+) -->\n)(?P<body>.*?)(<!-- end -->)', re.S)

# Every reason in words; the code's own sentences add the values and the remedy at run time.
MEANINGS = {
    'no_goal': 'the features come without a goal view',
    'no_camera': 'no usable `camera_info` has come',
    'camera_mismatch': 'another camera, or another size, than the one the loop was started with',
    'no_listener': 'nobody subscribes to the command',
    'second_publisher': 'somebody else publishes the command',
    'features_silent': 'the tracker has said nothing for `watchdog.timeout`',
    'image_silent': 'the tracker speaks, but shows no new image',
    'features_stale': 'the image behind the features is older than `watchdog.staleness`',
    'stamp_future': 'a stamp lies ahead of the clock by more than `watchdog.future_tolerance`',
    'stamp_backward': 'a stamp does not follow the one before it',
    'stamp_zero': 'nobody stamped the image, and `watchdog.zero_stamp` is `reject`',
    'too_few_points': 'fewer points than `watchdog.least_points`',
    'ill_conditioned': 'the points do not fix the motion: noise would move the camera',
    'not_finite': 'a number that is not finite, in or out',
    'diverging': 'the error grows all through `watchdog.diverging_window`',
    'stalled': 'no progress within `watchdog.stalled_window` while above tolerance',
    'leaving_view': 'the points crowd the image border',
    'travel_limit': 'the motion since engaging exceeds its leash',
    'heartbeat_lost': "the operator's side has stopped saying that it is there",
    'halted': '`~/halt` was true',
    'overrun': "the controller's own tick came late several times in a row, or the loop slept",
    'clock_jump': 'time was reset under the loop',
    'exception': 'an error of the program',
}


def table(head: tuple[str, ...], rows: list[tuple[str, ...]]) -> str:
    """Return a Markdown table."""
    lines = ['| ' + ' | '.join(head) + ' |', '|' + '---|' * len(head)]
    lines += ['| ' + ' | '.join(cell.replace('|', '\\|') for cell in row) + ' |' for row in rows]
    return '\n'.join(lines) + '\n'


def text_of(value: object) -> str:
    """Return a default as one would write it into a parameter file."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, tuple):
        return '[' + ', '.join(f'{item:g}' for item in value) + ']'
    if isinstance(value, float):
        text = f'{value:g}'
        return text if any(mark in text for mark in '.e') else text + '.0'
    return str(value) if value != '' else "''"


def range_of(definition: Definition) -> str:
    """Return what is allowed, in a few characters."""
    if definition.choices:
        return ', '.join(f'`{choice}`' for choice in definition.choices)
    low, high = (limit if limit is None or definition.kind is int else f'{limit:g}'
                 for limit in (definition.low, definition.high))
    words = ''
    if low is not None and high is not None:
        words = f'{low} … {high}'
    elif low is not None:
        words = f'≥ {low}'
    elif high is not None:
        words = f'≤ {high}'
    if definition.lengths:
        count = ' or '.join(map(str, definition.lengths)) + ' numbers'
        words = f'{count}, {words}' if words else count
    return words


def settings_of(node: str) -> tuple[type, ...]:
    """Return the settings classes of a node, its core's first."""
    from servo_nodes.control.controller import ControllerSettings
    from servo_nodes.ros import options
    from servo_nodes.simulation.simulator import SimulatorSettings
    from servo_nodes.tracking.tracker import TrackerSettings
    core, shell = {'tracker': (TrackerSettings, options.TrackerNodeSettings),
                   'controller': (ControllerSettings, options.ControllerNodeSettings),
                   'simulator': (SimulatorSettings, options.SimulatorNodeSettings)}[node]
    return core, shell, options.ShellSettings


def known_of(node: str) -> dict[str, Definition]:
    """Return every parameter of a node by its name."""
    return {name: item for cls in settings_of(node) for name, item in definitions(cls).items()}


def parameters(node: str) -> str:
    """Return the table of a node's parameters."""
    return table(('parameter', 'default', 'allowed', 'unit', 'meaning'), [
        (f'`{name}`' + ' \\*' * item.fixed, f'`{text_of(item.default)}`', range_of(item),
         item.unit, item.help) for name, item in known_of(node).items()])


def reasons() -> str:
    """Return the gate's table, most severe row first."""
    from servo_nodes.control.gate import TABLE
    rows: list[tuple[str, ...]] = []
    for row in TABLE:
        name = row.reason.value
        count = {1: 'at once'}.get(row.trigger, f'{row.trigger} in a row')
        if row.trigger >= 1_000_000:
            count = 'when it lasts'
        back = f'{row.release} good views' if row.release else {
            'fault': 'reset, engage', 'standby': 'engage', 'slow': 'by itself'}[row.reaction.value]
        cells = (f'`{name}`', MEANINGS[name], row.reaction.value, count, back,
                 'yes' if row.refuses else '')
        if cells not in rows:
            rows.append(cells)
    return table(('reason', 'when', 'answer', 'after', 'the way back', 'refuses to engage'), rows)


def states() -> str:
    """Return the diagram of the states."""
    from servo_nodes.control.states import diagram
    return f'```mermaid\n{diagram()}```\n'


def parts() -> dict[str, Callable[[], str]]:
    """Return the writer of every generated part by its name."""
    return {'states': states, 'reasons': reasons,
            **{f'{node} parameters': functools.partial(parameters, node) for node in NODES}}


def rewritten(text: str) -> str:
    """Return `text` with every generated part as the code has it now."""
    writers = parts()

    def part(match: re.Match) -> str:
        name = match['name']
        if name not in writers:
            raise ValueError(f'README part: expected one of {", ".join(writers)}, got {name!r}')
        return f'{match[1]}{writers[name]()}{match[4]}'
    return PART.sub(part, text)


if __name__ == '__main__':
    README.write_text(rewritten(README.read_text(encoding='utf-8')), encoding='utf-8')
