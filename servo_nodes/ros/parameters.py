# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Settings dataclasses <-> ROS parameters: declared, described, and changed as a whole or not at
all.

The dataclass is the only definition. Every parameter carries its description with the unit, its
range, and `read_only` where the setting is fixed. Whole numbers serve for real ones, in files
and at run time.
"""

from __future__ import annotations

import math
import typing
from collections.abc import Mapping, Sequence

from rcl_interfaces.msg import FloatingPointRange, IntegerRange, ParameterDescriptor
from rclpy.parameter import Parameter

from servo_nodes.settings import (
    Definition,
    Value,
    definitions,
    mapping_from_settings,
    nearest,
    settings_from_mapping,
)

MOST_TEXT = 4096
_TYPES = {bool: Parameter.Type.BOOL, int: Parameter.Type.INTEGER, float: Parameter.Type.DOUBLE,
          str: Parameter.Type.STRING, tuple: Parameter.Type.DOUBLE_ARRAY}
_OWN = ('use_sim_time', 'qos_overrides.', 'start_type_description_service')
Group = typing.TypeVar('Group')


class Parameters:
    """The parameters of one node: several settings dataclasses side by side.

    Parameters
    ----------
    node : rclpy.node.Node, on which they are declared
    classes : settings dataclasses whose dotted names do not collide

    Raises
    ------
    ValueError
        One sentence, when a parameter file or the command line asks for what is not allowed.
    """

    def __init__(self, node: typing.Any, *classes: type) -> None:
        self._node = node
        self._settings: dict[type, object] = {}
        self._known: dict[str, Definition] = {}
        for cls in classes:
            self._known.update(definitions(cls))
            given = {name: self._override(name, definition)
                     for name, definition in definitions(cls).items()}
            self._settings[cls] = settings_from_mapping(
                cls, {name: value for name, value in given.items() if value is not None})
        for settings in self._settings.values():
            for name, value in mapping_from_settings(settings).items():
                self._declare(self._known[name], value)

    def __getitem__(self, cls: type[Group]) -> Group:
        """Return the settings of one class, as they are in force."""
        return typing.cast(Group, self._settings[cls])

    def values(self) -> dict[str, Value]:
        """Return everything that is in force by its dotted name."""
        found: dict[str, Value] = {}
        for settings in self._settings.values():
            found.update(mapping_from_settings(settings))
        return found

    def unknown(self) -> list[str]:
        """Return one sentence for each overriding name that no parameter took."""
        # The names are not public in rclpy; without them nothing is said.
        given = getattr(self._node, '_parameter_overrides', {})
        sentences = []
        for name in given:
            if name in self._known or name.startswith(_OWN) or self._node.has_parameter(name):
                continue
            near = nearest(name, self._known)
            sentences.append(f'parameter {name}: expected a known name, this one is ignored'
                             + (f'; did you mean {near!r}?' if near else ''))
        return sentences

    def judged(self, changes: Sequence[Parameter],
               ) -> tuple[list[Parameter], dict[type, object]]:
        """Return the changes with their types put right, and the settings they would lead to.

        Nothing is changed. Names that are not ours pass through.

        Raises
        ------
        ValueError
            One sentence, when any of the changes, or all of them together, are not allowed.
        """
        ours: dict[str, Value] = {}
        passed = []
        for change in changes:
            definition = self._known.get(change.name)
            if definition is None:
                passed.append(change)
                continue
            value = definition.check(_plain(change, definition))
            if definition.fixed and value != self.values()[change.name]:
                raise ValueError(f'{change.name}: expected {self.values()[change.name]!r} to stay '
                                 f'while the node runs, got {value!r}; set it before the start')
            if not definition.fixed:
                ours[change.name] = value
                passed.append(_parameter(definition, value))
        return passed, self._changed(ours)

    def take(self, settings: Mapping[type, object]) -> list[str]:
        """Put changed settings in force; return a sentence for each value that is new."""
        before = self.values()
        self._settings.update(settings)
        return [f'{name}: {before[name]!r} -> {value!r}'
                for name, value in self.values().items() if value != before[name]]

    def _changed(self, ours: Mapping[str, Value]) -> dict[type, object]:
        found: dict[type, object] = {}
        for cls, settings in self._settings.items():
            mine = {name: value for name, value in ours.items() if name in definitions(cls)}
            if mine:
                found[cls] = settings_from_mapping(cls, mine, settings)
        return found

    def _override(self, name: str, definition: Definition) -> object:
        """Return what a file or the command line says of a name, None when nothing.

        A parameter of free type takes the override as it is; a typed one would end the node at a
        whole number for a real one, without a word of what to do.
        """
        node = self._node
        free = ParameterDescriptor(dynamic_typing=True)
        parameter = node.declare_parameter(name, None, free)
        value = None
        if parameter.type_ is not Parameter.Type.NOT_SET:
            value = _plain(parameter, definition)
        node.undeclare_parameter(name)
        return value

    def _declare(self, definition: Definition, value: Value) -> None:
        node, name = self._node, definition.name
        described = descriptor(definition)
        if definition.kind is not tuple:
            node.declare_parameter(name, value, described, ignore_override=True)
            return
        # An empty list has no type of its own: the type is declared first, the list set after.
        open_ = ParameterDescriptor()
        node.declare_parameter(name, Parameter.Type.DOUBLE_ARRAY, open_, ignore_override=True)
        node.set_parameters_atomically([_parameter(definition, value)])
        node.set_descriptor(name, described)


def descriptor(definition: Definition) -> ParameterDescriptor:
    """Return what `ros2 param describe` shows of a setting."""
    unit = f' [{definition.unit}]' if definition.unit else ''
    found = ParameterDescriptor(
        name=definition.name, type=_TYPES[definition.kind].value, read_only=definition.fixed,
        description=definition.help + unit)
    if definition.choices or definition.lengths or definition.kind is tuple:
        found.additional_constraints = 'expected ' + definition.expectation()
    if definition.low is None and definition.high is None:
        return found
    if definition.kind is int:
        low = -2**63 if definition.low is None else int(definition.low)
        high = 2**63 - 1 if definition.high is None else int(definition.high)
        found.integer_range = [IntegerRange(from_value=low, to_value=high)]
    elif definition.kind is float:
        low_ = -math.inf if definition.low is None else float(definition.low)
        high_ = math.inf if definition.high is None else float(definition.high)
        found.floating_point_range = [FloatingPointRange(from_value=low_, to_value=high_)]
    return found


def _plain(parameter: Parameter, definition: Definition) -> object:
    """Return a parameter's value as a settings mapping takes it, bounded in size."""
    value = parameter.value
    if isinstance(value, str) and len(value) > MOST_TEXT:
        raise ValueError(f'{definition.name}: expected at most {MOST_TEXT} characters, '
                         f'got {len(value)}')
    if definition.kind is tuple and value is not None and not isinstance(value, (str, bytes)):
        return tuple(value) if isinstance(value, Sequence) or hasattr(value, 'tolist') else value
    return value


def _parameter(definition: Definition, value: Value) -> Parameter:
    return Parameter(definition.name, _TYPES[definition.kind],
                     list(value) if isinstance(value, tuple) else value)
