# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""How a settings dataclass declares unit, range, default and help, and is read strictly.

One frozen dataclass per core is the only definition of its settings; ROS parameter descriptors,
the YAML files and the tables of the README are derived from it or checked against it:

    @dataclass(frozen=True)
    class LawSettings(Checked):
        gain: float = setting(1.0, unit='1/s', low=0.01, high=20.0, help='…')

    @dataclass(frozen=True)
    class ControllerSettings(Checked):
        law: LawSettings = group(LawSettings)

Nested groups give dotted names (`law.gain`). Every refusal is a `ValueError` with one sentence.
"""

from __future__ import annotations

import dataclasses
import difflib
import math
import typing
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass

Scalar = bool | int | float | str
Value = Scalar | tuple[float, ...]


@dataclass(frozen=True)
class Definition:
    """What one setting means; `kind` is bool, int, float, str or tuple (of floats)."""

    name: str
    kind: type
    default: Value
    help: str
    unit: str = ''
    low: float | None = None
    high: float | None = None
    choices: tuple[str, ...] = ()
    lengths: tuple[int, ...] = ()
    fixed: bool = False

    def check(self, value: object) -> Value:
        """Return `value` as the kind asks for (an integer serves as a float), or raise."""
        if self.kind is tuple:
            return self._checked_tuple(value)
        if self.kind is float and isinstance(value, int) and not isinstance(value, bool):
            value = float(value)
        if not isinstance(value, self.kind) or (self.kind is int and isinstance(value, bool)):
            raise ValueError(f'{self.name}: expected {self.expectation()}, got {value!r}')
        if self.choices and value not in self.choices:
            near = nearest(str(value), self.choices)
            raise ValueError(f'{self.name}: expected {self.expectation()}, got {value!r}'
                             + (f'; did you mean {near!r}?' if near else ''))
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            self._check_range(value)
        return typing.cast(Scalar, value)

    def _checked_tuple(self, value: object) -> tuple[float, ...]:
        if isinstance(value, (str, bytes)) or not isinstance(value, Iterable):
            raise ValueError(f'{self.name}: expected {self.expectation()}, got {value!r}')
        items = tuple(value)
        if not all(isinstance(item, (int, float)) and not isinstance(item, bool)
                   for item in items):
            raise ValueError(f'{self.name}: expected {self.expectation()}, got {items!r}')
        if self.lengths and len(items) not in self.lengths:
            raise ValueError(f'{self.name}: expected {self.expectation()}, '
                             f'got {len(items)} numbers')
        for item in items:
            self._check_range(item)
        return tuple(float(item) for item in items)

    def _check_range(self, value: float) -> None:
        low = -math.inf if self.low is None else self.low
        high = math.inf if self.high is None else self.high
        if not (math.isfinite(value) and low <= value <= high):
            raise ValueError(f'{self.name}: expected {self.expectation()}, got {value!r}')

    def expectation(self) -> str:
        """Say in words what would be accepted."""
        if self.choices:
            return 'one of ' + ', '.join(self.choices)
        words = {bool: 'true or false', int: 'a whole number', float: 'a finite number',
                 str: 'text', tuple: 'finite numbers'}[self.kind]
        if self.lengths:
            words = ' or '.join(str(length) for length in self.lengths) + ' ' + words
        if self.low is not None and self.high is not None:
            words += f' from {self.low:g} to {self.high:g}'
        elif self.low is not None:
            words += f' of at least {self.low:g}'
        elif self.high is not None:
            words += f' of at most {self.high:g}'
        return words + (f' ({self.unit})' if self.unit else '')


def setting(default: Value, *, help: str, unit: str = '', low: float | None = None,
            high: float | None = None, choices: tuple[str, ...] = (),
            lengths: tuple[int, ...] = (), fixed: bool = False) -> typing.Any:
    """Declare one setting of a `Checked` dataclass; `fixed` ones cannot change at run time."""
    kind = type(default)
    definition = Definition('', kind, default, help, unit, low, high, choices, lengths, fixed)
    return dataclasses.field(default=default, metadata={'definition': definition})


def group(cls: type) -> typing.Any:
    """Declare a nested group of settings, whose names are prefixed with the field's name."""
    return dataclasses.field(default_factory=cls, metadata={'group': cls})


class Checked:
    """Base of a settings dataclass: the constructor refuses what the definitions do not allow.

    A subclass may add `check_together()` for rules that span several settings.
    """

    def __post_init__(self) -> None:
        for item in dataclasses.fields(self):  # type: ignore[arg-type]
            if 'definition' in item.metadata:
                definition = dataclasses.replace(item.metadata['definition'], name=item.name)
                object.__setattr__(self, item.name, definition.check(getattr(self, item.name)))
        self.check_together()

    def check_together(self) -> None:
        """Refuse combinations; the base allows all."""


def definitions(cls: type, prefix: str = '') -> dict[str, Definition]:
    """Return every setting of `cls` by its dotted name, in order of declaration."""
    found: dict[str, Definition] = {}
    for item in dataclasses.fields(cls):
        name = prefix + item.name
        if 'group' in item.metadata:
            found.update(definitions(item.metadata['group'], name + '.'))
        else:
            found[name] = dataclasses.replace(item.metadata['definition'], name=name)
    return found


Settings = typing.TypeVar('Settings')


def settings_from_mapping(cls: type[Settings], values: Mapping[str, object],
                          base: Settings | None = None) -> Settings:
    """Build `cls` from dotted or nested names; the rest comes from `base` or the defaults.

    Raises
    ------
    ValueError
        For a name that is not known (the nearest one is offered) or a value that is not allowed.
    """
    known = definitions(cls)
    flat = dict(_flattened(values))
    for name in flat:
        if name not in known:
            near = nearest(name, known)
            raise ValueError(f'{name}: expected a known setting, got this name'
                             + (f'; did you mean {near!r}?' if near else ''))
    checked = {name: known[name].check(value) for name, value in flat.items()}
    start = mapping_from_settings(base) if base is not None else {}
    return _built(cls, {**start, **checked}, '')


def mapping_from_settings(settings: object) -> dict[str, Value]:
    """Return every value of a settings object by its dotted name."""
    found: dict[str, Value] = {}
    for name in definitions(type(settings)):
        value = settings
        for part in name.split('.'):
            value = getattr(value, part)
        found[name] = typing.cast(Value, value)
    return found


def nearest(name: str, names: Iterable[str]) -> str | None:
    """Return the most similar known name, or None when nothing resembles it."""
    names = list(names)
    close = difflib.get_close_matches(name, names, n=1, cutoff=0.6)
    if close:
        return close[0]
    last = [known for known in names if known.rsplit('.', 1)[-1] == name.rsplit('.', 1)[-1]]
    return last[0] if last else None


def _flattened(values: Mapping[str, object], prefix: str = '') -> Iterator[tuple[str, object]]:
    for name, value in values.items():
        if isinstance(value, Mapping):
            yield from _flattened(value, f'{prefix}{name}.')
        else:
            yield prefix + str(name), value


def _built(cls: type[Settings], values: Mapping[str, Value], prefix: str) -> Settings:
    arguments: dict[str, object] = {}
    for item in dataclasses.fields(cls):  # type: ignore[arg-type]
        name = prefix + item.name
        if 'group' in item.metadata:
            arguments[item.name] = _built(item.metadata['group'], values, name + '.')
        elif name in values:
            arguments[item.name] = values[name]
    return cls(**arguments)
