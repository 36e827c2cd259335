# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The settings of a replay: defaults, then what was recorded, then the parameter files given."""

from __future__ import annotations

import pathlib
import typing
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field

import yaml

from servo_nodes.control.settings import ControllerSettings
from servo_nodes.settings import definitions, nearest, settings_from_mapping
from servo_nodes.simulation.settings import SimulatorSettings
from servo_nodes.tracking.options import TrackerSettings

MOST_BYTES = 1024 * 1024
NODES: dict[str, type] = {'tracker': TrackerSettings, 'controller': ControllerSettings,
                          'simulator': SimulatorSettings}
# What only the nodes know, which a replay has none of.
SHELLS = ('autostart', 'priority', 'image_transport', 'overlay.rate', 'seed', 'image.rectified',
          'clock.lead', 'clock.speed', 'publish_depth', 'target_frame', 'use_sim_time',
          'start_type_description_service')
_SHELL_GROUPS = ('qos_overrides.',)
# The fields of rcl_interfaces/ParameterValue by the number of its type.
_VALUES = {1: 'bool_value', 2: 'integer_value', 3: 'double_value', 4: 'string_value',
           6: 'bool_array_value', 7: 'integer_array_value', 8: 'double_array_value',
           9: 'string_array_value'}


@dataclass
class Names:
    """Values by dotted name for each node, from one source."""

    of: dict[str, dict[str, object]] = field(
        default_factory=lambda: {node: {} for node in NODES})


@dataclass(frozen=True)
class Choice:
    """What the cores are built with; `rectified`: the controller's camera has no lens."""

    tracker: TrackerSettings
    controller: ControllerSettings
    rectified: bool = False


def chosen(recorded: Names, files: Iterable[pathlib.Path], notes: list[str]) -> Choice:
    """Return the settings; what was recorded and is not understood only leaves a note.

    Raises
    ------
    ValueError
        One sentence that names the file, for a parameter file that is none, holds a name that no
        node knows, or a value that is not allowed.
    """
    tracker = _with_recorded(TrackerSettings, recorded.of['tracker'], notes)
    controller = _with_recorded(ControllerSettings, recorded.of['controller'], notes)
    rectified = bool(recorded.of['controller'].get('image.rectified', False))
    for path in files:
        names = names_in_file(path)
        try:
            tracker = settings_from_mapping(
                TrackerSettings, _known(TrackerSettings, names.of['tracker']), tracker)
            controller = settings_from_mapping(
                ControllerSettings, _known(ControllerSettings, names.of['controller']),
                controller)
        except ValueError as error:
            raise ValueError(f'{path}: {error}') from error
        rectified = bool(names.of['controller'].get('image.rectified', rectified))
    return Choice(tracker, controller, rectified or tracker.image.rectified)


def names_in_file(path: pathlib.Path) -> Names:
    """Return the parameters of a ROS parameter file, by node.

    Raises
    ------
    ValueError
        For anything else, and for names that no node has.
    """
    page = page_from_yaml(path)
    found = Names()
    for pattern, section in page.items():
        if not isinstance(section, dict) or not isinstance(section.get('ros__parameters'), dict):
            raise ValueError(f'{path}: {pattern}: expected ros__parameters below a node, got none')
        values = dict(_flat(section['ros__parameters']))
        last = str(pattern).rstrip('/').rpartition('/')[2]
        nodes = list(NODES) if last in ('*', '**') else [last] if last in NODES else []
        if nodes:
            _refuse_unknown(path, nodes, values)
        for node in nodes:
            found.of[node].update(values)
    return found


def page_from_yaml(path: pathlib.Path) -> dict[object, typing.Any]:
    """Return the mapping in a YAML file, bounded and safe; ValueError naming it otherwise."""
    try:
        with path.open('rb') as file:
            data = file.read(MOST_BYTES + 1)
        if len(data) > MOST_BYTES:
            raise ValueError(f'more than {MOST_BYTES} bytes')
        page = yaml.safe_load(data.decode('utf-8'))
    except OSError as error:
        raise ValueError(f'{path}: expected a readable file, got {error.strerror}') from error
    except (yaml.YAMLError, UnicodeDecodeError, RecursionError, ValueError) as error:
        raise ValueError(f'{path}: expected YAML, got {" ".join(str(error).split())}') from error
    if not isinstance(page, dict):
        raise ValueError(f'{path}: expected names and values, got {type(page).__name__}')
    return page


def names_from_event(message: typing.Any, names: Names, *, changed: bool) -> str | None:
    """Add what an rcl_interfaces/ParameterEvent declares, or changed, and return its node.

    None, and nothing added, for a node that is none of ours.
    """
    node = str(message.node).rpartition('/')[2]
    if node not in names.of:
        return None
    for parameter in message.changed_parameters if changed else message.new_parameters:
        attribute = _VALUES.get(int(parameter.value.type))
        if attribute is not None:
            value = getattr(parameter.value, attribute)
            names.of[node][str(parameter.name)] = (
                value if isinstance(value, (bool, int, float, str)) else list(value))
    return node


def merged(cls: type, settings: typing.Any, values: Mapping[str, object]) -> typing.Any:
    """Return `settings` with the values that `cls` knows; ValueError when they are refused."""
    return settings_from_mapping(cls, _known(cls, values), settings)


def _with_recorded(cls: type, values: Mapping[str, object], notes: list[str]) -> typing.Any:
    try:
        return settings_from_mapping(cls, _known(cls, values))
    except ValueError as error:
        notes.append(f'the recorded parameters are not used: {error}')
        return cls()


def _known(cls: type, values: Mapping[str, object]) -> dict[str, object]:
    known = definitions(cls)
    return {name: _typed(value) for name, value in values.items() if name in known}


def _typed(value: object) -> object:
    return [item.item() if hasattr(item, 'item') else item for item in value] if isinstance(
        value, list) else value


def _refuse_unknown(path: pathlib.Path, nodes: list[str], values: Mapping[str, object]) -> None:
    known = {name for node in nodes for name in definitions(NODES[node])} | set(SHELLS)
    for name in values:
        if name not in known and not name.startswith(_SHELL_GROUPS):
            near = nearest(name, known)
            raise ValueError(f'{path}: {name}: expected a parameter of {" or ".join(nodes)}, got '
                             'this name' + (f'; did you mean {near!r}?' if near else ''))


def _flat(values: Mapping[object, object], prefix: str = '') -> Iterator[tuple[str, object]]:
    for name, value in values.items():
        if isinstance(value, dict):
            yield from _flat(value, f'{prefix}{name}.')
        else:
            yield f'{prefix}{name}', value
