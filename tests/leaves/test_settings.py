# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Settings: every refusal is one sentence that names the setting, what was expected, what came."""

from __future__ import annotations

import array
import dataclasses
import math
from dataclasses import dataclass

import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.settings import (
    Checked,
    definitions,
    group,
    mapping_from_settings,
    nearest,
    setting,
    settings_from_mapping,
)


@dataclass(frozen=True)
class Brush(Checked):
    """A group of every kind."""

    speed: float = setting(1.5, unit='1/s', low=0.1, high=10.0, help='how fast it turns')
    bristles: int = setting(40, low=1, help='how many')
    soft: bool = setting(True, help='whether it is soft')
    colour: str = setting('grey', choices=('grey', 'green'), help='its colour')
    label: str = setting('', help='what is written on it')
    pose: tuple[float, ...] = setting((), unit='m', lengths=(0, 3), low=-2.0, high=2.0,
                                      help='where', fixed=True)


@dataclass(frozen=True)
class Sweeper(Checked):
    """A whole with two groups and a rule across them."""

    front: Brush = group(Brush)
    rear: Brush = group(Brush)
    rate: float = setting(100.0, unit='Hz', high=500.0, help='how often')

    def check_together(self) -> None:
        """The rear brush may not outrun the front one."""
        if self.rear.speed > self.front.speed:
            raise ValueError(f'rear.speed: expected at most front.speed {self.front.speed:g}, '
                             f'got {self.rear.speed:g}')


def test_nested_and_dotted_names_mean_the_same():
    nested = settings_from_mapping(Sweeper, {'front': {'speed': 3.0}, 'rate': 50.0})
    dotted = settings_from_mapping(Sweeper, {'front.speed': 3.0, 'rate': 50.0})
    assert nested == dotted
    assert nested.front.speed == 3.0
    assert nested.rear == Brush()


def test_an_integer_serves_as_a_float_and_nothing_else_is_converted():
    speed = settings_from_mapping(Sweeper, {'front.speed': 2}).front.speed
    assert speed == 2.0 and isinstance(speed, float)
    assert settings_from_mapping(Sweeper, {'front.pose': [1, 0.5, -2]}).front.pose == (1, 0.5, -2)
    assert settings_from_mapping(Sweeper, {'front.pose': array.array('d', [1, 1, 1])})


REFUSED = [
    ({'front.speed': 0.0},
     r'front\.speed: expected a finite number from 0\.1 to 10 \(1/s\), got 0\.0'),
    ({'front.speed': 10.5}, r'front\.speed: expected .* got 10\.5'),
    ({'front.speed': math.nan}, r'front\.speed: expected .* got nan'),
    ({'rate': -math.inf}, r'rate: expected a finite number of at most 500 \(Hz\), got -inf'),
    ({'front.speed': True}, r'front\.speed: expected a finite number .* got True'),
    ({'front.speed': '2.0'}, r"front\.speed: expected a finite number .* got '2\.0'"),
    ({'front.bristles': 0}, r'front\.bristles: expected a whole number of at least 1, got 0'),
    ({'front.bristles': 3.0}, r'front\.bristles: expected a whole number of at least 1, got 3\.0'),
    ({'front.bristles': True}, r'front\.bristles: expected a whole number .* got True'),
    ({'front.soft': 1}, r'front\.soft: expected true or false, got 1'),
    ({'front.label': 7}, r'front\.label: expected text, got 7'),
    ({'front.colour': 'red'}, r"front\.colour: expected one of grey, green, got 'red'"),
    ({'front.colour': 'gren'}, r"got 'gren'; did you mean 'gre"),
    ({'front.pose': [1.0, 2.0]},
     r'front\.pose: expected 0 or 3 finite numbers from -2 to 2 \(m\), got 2 numbers'),
    ({'front.pose': [0.0, 0.0, math.nan]}, r'front\.pose: expected .* got nan'),
    ({'front.pose': [0.0, 0.0, 5]}, r'front\.pose: expected .* got 5'),
    ({'front.pose': 'abc'}, r"front\.pose: expected .* got 'abc'"),
    ({'front.pose': 1.0}, r'front\.pose: expected .* got 1\.0'),
    ({'front.pose': [True, 0.0, 0.0]}, r'front\.pose: expected .* got \(True'),
    ({'front.sped': 1.0}, r"front\.sped: expected a known setting, .* mean 'front\.speed'\?"),
    ({'speed': 1.0}, r"speed: expected a known setting, .* did you mean '(front|rear)\.speed'\?"),
    ({'zzz': 1.0}, r'zzz: expected a known setting, got this name$'),
    ({'front': 3}, r'front: expected a known setting'),
    ({'rear.speed': 4.0}, r'rear\.speed: expected at most front\.speed 1\.5, got 4'),
]


@pytest.mark.parametrize(('values', 'sentence'), REFUSED)
def test_what_is_not_allowed_is_refused_in_one_sentence(values, sentence):
    with pytest.raises(ValueError, match=sentence) as caught:
        settings_from_mapping(Sweeper, values)
    assert '\n' not in str(caught.value)


def test_constructors_refuse_as_strictly_as_mappings():
    with pytest.raises(ValueError, match='speed: expected a finite number from 0.1 to 10'):
        Brush(speed=11.0)
    with pytest.raises(ValueError, match='speed'):
        dataclasses.replace(Brush(), speed=math.nan)
    assert isinstance(Brush(speed=2).speed, float)


def test_settings_cannot_be_changed_in_place():
    with pytest.raises(dataclasses.FrozenInstanceError):
        Brush().speed = 2.0


def test_what_is_not_named_comes_from_the_base():
    base = settings_from_mapping(Sweeper, {'front.speed': 5.0, 'rear.label': 'old'})
    changed = settings_from_mapping(Sweeper, {'rear.speed': 4.0}, base)
    assert (changed.front.speed, changed.rear.speed, changed.rear.label) == (5.0, 4.0, 'old')
    assert base.rear.speed == 1.5


def test_definitions_carry_everything_a_table_needs():
    known = definitions(Sweeper)
    assert list(known)[:2] == ['front.speed', 'front.bristles'] and len(known) == 13
    speed = known['rear.speed']
    assert (speed.name, speed.unit, speed.low, speed.high, speed.default, speed.help) == (
        'rear.speed', '1/s', 0.1, 10.0, 1.5, 'how fast it turns')
    assert known['front.pose'].fixed and not speed.fixed


@given(st.fixed_dictionaries({}, optional={
    'front.speed': st.floats(1.5, 10.0), 'rear.soft': st.booleans(), 'rear.label': st.text(),
    'front.colour': st.sampled_from(['grey', 'green']), 'rear.bristles': st.integers(1, 10 ** 6),
    'rear.pose': st.lists(st.floats(-2, 2), min_size=3, max_size=3).map(tuple)}))
def test_a_mapping_comes_back_as_it_went(values):
    built = settings_from_mapping(Sweeper, values)
    back = mapping_from_settings(built)
    assert {name: back[name] for name in values} == values
    assert settings_from_mapping(Sweeper, back) == built


@given(st.one_of(st.floats(), st.integers(), st.text(), st.booleans(), st.none(),
                 st.lists(st.floats())))
def test_any_value_is_either_within_its_range_or_refused(value):
    try:
        speed = settings_from_mapping(Sweeper, {'front.speed': value, 'rear.speed': 0.1})
    except ValueError as error:
        assert str(error).startswith('front.speed: expected a finite number')
    else:
        assert 0.1 <= speed.front.speed <= 10.0


def test_the_nearest_name_is_found_by_resemblance_or_by_its_last_part():
    names = ['caps.linear', 'watchdog.timeout']
    assert nearest('caps.liner', names) == 'caps.linear'
    assert nearest('a.very.different.group.timeout', names) == 'watchdog.timeout'
    assert nearest('colour', names) is None
