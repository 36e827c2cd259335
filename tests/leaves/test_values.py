# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Values: what crosses rooms is checked in shape, copied and read-only."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from servo_nodes.values import Answer, Command, Reason, State, Twist, View


def view(count: int = 3, **changes) -> View:
    """Return a view of `count` points, with changes."""
    fields = {'stamp': 5, 'frame_id': 'eye', 'points_xy': np.zeros((count, 2)),
              'goal_xy': np.ones((count, 2)), 'depths': np.full(count, np.nan),
              'goal_depths': np.ones(count), 'weights': np.ones(count), 'ids': np.arange(count)}
    return View(**{**fields, **changes})


def test_an_empty_view_says_alive_and_nothing_seen():
    empty = View.empty(7, 'eye')
    assert len(empty) == 0 and empty.stamp == 7 and empty.points_xy.shape == (0, 2)
    assert len(view()) == 3


@pytest.mark.parametrize(('name', 'value'), [
    ('points_xy', np.zeros((3, 3))), ('goal_xy', np.zeros((2, 2))), ('depths', np.zeros((3, 1))),
    ('goal_depths', np.zeros(4)), ('weights', 1.0), ('ids', np.arange(2))])
def test_a_view_of_uneven_arrays_is_refused(name, value):
    with pytest.raises(ValueError, match=f'{name}: expected shape .*, got') as caught:
        view(**{name: value})
    assert '\n' not in str(caught.value)


def test_a_value_is_untouched_by_what_happens_to_its_source():
    source = np.zeros((3, 2))
    seen = view(points_xy=source)
    source[:] = 9.0
    assert (seen.points_xy == 0).all()


@pytest.mark.parametrize(
    'name', ['points_xy', 'goal_xy', 'depths', 'goal_depths', 'weights', 'ids'])
def test_arrays_of_a_view_cannot_be_written(name):
    with pytest.raises(ValueError, match='read-only'):
        getattr(view(), name)[...] = 0


def test_numbers_are_cast_to_double_and_ids_to_unsigned():
    seen = view(points_xy=np.zeros((3, 2), np.float32), ids=[1, 2, 2 ** 32 - 1])
    assert seen.points_xy.dtype == np.float64
    assert seen.ids.dtype == np.uint32 and seen.ids[2] == 2 ** 32 - 1


def test_a_twist_has_six_components_and_is_read_only():
    assert (Twist.zero('eye').vector == 0).all()
    with pytest.raises(ValueError, match=r'vector: expected shape \(6,\), got \(5,\)'):
        Twist(np.zeros(5), 'eye')
    with pytest.raises(ValueError, match='read-only'):
        Twist(np.ones(6), 'eye').vector[0] = 2.0


def test_values_are_frozen():
    command = Command(Twist.zero('eye'), State.STANDBY, Reason.NONE, '', 1, None)
    for value, name in ((command, 'state'), (Answer(True, ''), 'ok'), (view(), 'stamp')):
        with pytest.raises(dataclasses.FrozenInstanceError):
            setattr(value, name, 0)


def test_words_of_states_and_reasons_are_lower_case_and_unique():
    for kind in (State, Reason):
        words = [member.value for member in kind]
        assert len(set(words)) == len(words)
        assert all(word == member.name.lower() for word, member in zip(words, kind, strict=True))
