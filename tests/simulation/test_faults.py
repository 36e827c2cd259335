# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The fault injector: each fault, the order of messages, the same dice every time."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.simulation.faults import (
    Channel,
    Damage,
    FaultSettings,
    Outcome,
    damaged_image,
    damaged_view,
)
from servo_nodes.values import View

MS = 1_000_000
SHARES = ('drop', 'duplicate', 'reorder', 'black', 'burst', 'nan', 'jump', 'stamp_zero')


def sent(count=20, seed=0, **faults):
    """Return what comes out of a line that is given 0, 1, 2, ... every 33 ms."""
    channel: Channel[int] = Channel(FaultSettings(**faults), np.random.default_rng(seed))
    for k in range(count):
        channel.put(k, 1000 + 33 * k * MS, 33 * k * MS)
    return channel.take(10 ** 15)


def contents(messages):
    return [payload for _, payload in messages]


def test_a_line_without_faults_delivers_all_at_once_as_it_was():
    for k, (outcome, payload) in enumerate(sent()):
        assert payload == k and outcome.number == k and outcome.damage is Damage.NONE
        assert outcome.due == 33 * k * MS and outcome.stamp == 1000 + 33 * k * MS


def test_messages_wait_for_their_delay():
    channel: Channel[str] = Channel(FaultSettings(delay=0.05), np.random.default_rng(0))
    channel.put('a', 5, 5)
    assert channel.next_due == 5 + 50 * MS
    assert channel.take(4 + 50 * MS) == []
    assert contents(channel.take(5 + 50 * MS)) == ['a']
    assert channel.next_due is None


def test_jitter_spreads_the_delay_and_keeps_the_order():
    messages = sent(400, jitter=0.1)
    late = [outcome.due - 33 * k * MS for k, (outcome, _) in enumerate(messages)]
    assert contents(messages) == list(range(400))
    assert 0 <= min(late) < 40 * MS and 60 * MS < max(late) <= 100 * MS


def test_a_share_of_the_messages_is_lost():
    assert len(sent(drop=1.0)) == 0
    assert 300 < len(sent(1000, drop=0.6)) < 500


def test_messages_come_twice():
    assert contents(sent(3, duplicate=1.0)) == [0, 0, 1, 1, 2, 2]


def test_a_message_arrives_right_after_its_successor():
    messages = sent(4, reorder=1.0)
    assert contents(messages) == [1, 0, 3, 2]
    assert messages[1][0].due == messages[0][0].due + 1


def test_a_frozen_line_repeats_old_content_under_new_stamps():
    channel: Channel[int] = Channel(FaultSettings(), np.random.default_rng(0))
    for k in range(9):
        channel.adopt(FaultSettings(freeze=3 <= k < 6))
        channel.put(k, k, k)
    messages = channel.take(100)
    assert contents(messages) == [0, 1, 2, 2, 2, 2, 6, 7, 8]
    assert [outcome.stamp for outcome, _ in messages] == list(range(9))


def test_stamps_are_shifted_zeroed_or_thrown_back():
    assert sent(1, stamp_offset=0.5)[0][0].stamp == 1000 + 500 * MS
    assert sent(1, stamp_zero=1.0)[0][0].stamp == 0
    assert sent(1, jump=1.0, stamp_jump=0.2)[0][0].stamp == 1000 - 200 * MS


def test_faults_have_an_onset_and_a_duration():
    kept = contents(sent(20, drop=1.0, onset=0.1, duration=0.2))
    assert kept == [0, 1, 2, 3, *range(10, 20)]


def test_one_fault_does_not_shift_the_dice_of_another():
    alone = {p for _, p in sent(200, drop=0.3)}
    beside = {p for _, p in sent(200, drop=0.3, jitter=0.01, burst=0.5)}
    assert alone == beside


@given(st.fixed_dictionaries({name: st.floats(0, 1) for name in SHARES}),
       st.floats(0, 0.2), st.integers(0, 1000))
def test_any_faults_are_the_same_twice_and_never_early(shares, jitter, seed):
    one = sent(30, seed, jitter=jitter, **shares)
    assert one == sent(30, seed, jitter=jitter, **shares)
    dues = [outcome.due for outcome, _ in one]
    assert dues == sorted(dues)
    assert all(outcome.due >= 33 * outcome.number * MS for outcome, _ in one)
    assert set(contents(one)) <= set(range(30))


def outcome(damage, stamp=7):
    return Outcome(0, 0, stamp, damage, 42)


@pytest.mark.parametrize('kind', [np.uint8, np.uint16])
def test_images_are_blackened_or_buried_in_noise(kind):
    image = np.full((80, 100), np.iinfo(kind).max // 2, kind)
    faults = FaultSettings(burst_noise=20.0)
    assert damaged_image(image, outcome(Damage.NONE), faults) is image
    assert not damaged_image(image, outcome(Damage.BLACK), faults).any()
    assert not damaged_image(image, outcome(Damage.NAN), faults).any()
    noisy = damaged_image(image, outcome(Damage.BURST), faults)
    assert noisy.dtype == kind
    assert noisy.std() == pytest.approx(20 * np.iinfo(kind).max / 255, rel=0.05)
    np.testing.assert_array_equal(noisy, damaged_image(image, outcome(Damage.BURST), faults))


def test_views_lose_their_points_carry_nan_or_noise_and_wear_the_stamp():
    n = 400
    view = View(1, 'c', np.zeros((n, 2)), np.ones((n, 2)), np.ones(n), np.ones(n), np.ones(n),
                np.arange(n))
    faults = FaultSettings(burst_spread=0.1)
    assert len(damaged_view(view, outcome(Damage.BLACK), faults)) == 0
    assert np.isnan(damaged_view(view, outcome(Damage.NAN), faults).points_xy).all()
    noisy = damaged_view(view, outcome(Damage.BURST), faults)
    assert noisy.points_xy.std() == pytest.approx(0.1, rel=0.1)
    plain = damaged_view(view, outcome(Damage.NONE), faults)
    assert plain.stamp == noisy.stamp == 7 and not plain.points_xy.any()


def test_every_fault_is_off_by_default_and_documented():
    for field in dataclasses.fields(FaultSettings):
        assert field.metadata['definition'].help
    assert contents(sent(50)) == list(range(50))
