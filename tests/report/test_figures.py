# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Figures show what the record knows, and only that."""

from __future__ import annotations

import re
import sys
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest

from servo_nodes.report import drawing, figures
from servo_nodes.report.drawing import MissingExtra
from servo_nodes.report.record import Event, Recorder, Verdict
from tests.report.runs import record_of_a_run

pytest.importorskip('matplotlib', reason='figures need the report extra')


@pytest.fixture(scope='module')
def drawings():
    return {each.name: each for each in figures.drawings(record_of_a_run())}


def _words(each):
    tree = ElementTree.fromstring(each.data)
    return ' '.join(''.join(node.itertext()) for node in tree.iter() if node.tag.endswith('text'))


def test_a_full_record_gives_three_figures_that_are_small_and_sound(drawings):
    assert list(drawings) == ['time', 'paths', 'camera']
    for each in drawings.values():
        assert each.media == 'image/svg+xml'
        assert len(each.data) < drawing.MOST_SVG_BYTES
        ElementTree.fromstring(each.data)


def test_the_figure_of_time_names_states_reasons_and_quantities(drawings):
    words = _words(drawings['time'])
    for word in ('servoing', 'holding', 'settled', 'features silent at 2.10 s', 'error', 'cap',
                 'points', 'condition', 'image to features', 'position, mm'):
        assert word in words


def test_a_panel_is_absent_when_its_series_is():
    recorder = Recorder('short')
    recorder.declare('error', 'px', 'error')
    recorder.note('error', 0, 3.0)
    recorder.note('error', 10 ** 9, 1.0)
    (only,) = figures.drawings(recorder.record(Verdict(None, '')))
    assert only.name == 'time'
    assert 'error' in _words(only)
    assert 'condition' not in _words(only)


def test_an_empty_record_gives_no_figure():
    assert figures.drawings(Recorder('empty').record(Verdict(None, ''))) == []


@pytest.mark.parametrize('value', [0.0, -1.0, np.nan, np.inf, 1e300])
def test_a_value_no_axis_likes_does_not_stop_the_figure(value):
    recorder = Recorder('odd')
    for name in ('error', 'condition', 'points'):
        recorder.declare(name, '', name)
        for stamp in range(3):
            recorder.note(name, stamp, value)
    recorder.turn(Event(1, 'faulted', 'not_finite'))
    assert [each.name for each in figures.drawings(recorder.record(Verdict(None, '')))] == ['time']


def test_a_silence_is_a_gap_not_a_line():
    t = np.array([0.0, 0.1, 0.2, 3.0, 3.1])
    times, values = figures._with_gaps(t, np.arange(5.0)[:, None])
    assert np.isnan(values[3, 0])
    assert 0.2 < times[3] < 0.3
    np.testing.assert_array_equal(values[[0, 1, 2, 4, 5], 0], np.arange(5.0))


def test_the_paths_lie_on_the_goal_view_in_its_own_pixels(drawings):
    paths = drawings['paths']
    assert paths.under == record_of_a_run().picture('goal')
    head = ElementTree.fromstring(paths.data).attrib['viewBox']
    _, _, width, height = map(float, head.split())
    assert width / height == pytest.approx(640 / 480, rel=1e-3)


def test_the_chosen_paths_are_spread_over_the_image():
    chosen = figures._spread(record_of_a_run().paths)
    goals = np.array([path.goal_uv for path in chosen])
    assert len(chosen) == figures.MOST_PATHS
    assert len({path.ident for path in chosen}) == len(chosen)
    assert np.ptp(goals, axis=0).min() > 300


def test_the_same_record_gives_the_same_bytes(drawings):
    again = figures.drawings(record_of_a_run())
    assert [each.data for each in again] == [each.data for each in drawings.values()]


def test_a_drawing_too_large_as_svg_becomes_a_png():
    dots = np.random.default_rng(3).uniform(size=(2, 20_000))
    with drawing.pyplot_style() as make:
        few, many = make(figsize=(2, 2)), make(figsize=(2, 2))
        few.subplots().plot(*dots[:, :50])
        many.subplots().scatter(*dots)
        assert drawing.saved(few)[0] == 'image/svg+xml'
        media, data = drawing.saved(many)
    assert media == 'image/png'
    assert data.startswith(b'\x89PNG')


def test_without_matplotlib_one_sentence_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, 'matplotlib', None)
    with pytest.raises(MissingExtra, match=re.escape(
            "expected the package matplotlib, got none; install it with pip install "
            "'servo_nodes[report]' or apt install python3-matplotlib")):
        figures.drawings(record_of_a_run())


def test_a_long_record_is_thinned_but_keeps_its_peaks():
    t = np.arange(200_000) / 100
    values = np.column_stack([np.sin(t), np.zeros_like(t)])
    values[123_456, 1] = 5.0
    values[77_777, 0] = np.nan
    times, thinned = figures._thinned(t, values)
    assert len(times) < 6000
    assert (times[0], times[-1]) == (t[0], t[-1])
    assert thinned[:, 1].max() == 5.0
    assert times[thinned[:, 1].argmax()] == t[123_456]
    np.testing.assert_array_equal(thinned[:, 0], np.sin(times))
    assert np.all(np.diff(times) > 0)


def test_a_short_record_is_drawn_as_it_is():
    t, values = np.arange(900.0), np.ones((900, 3))
    assert figures._thinned(t, values) == (t, values)


def test_the_twist_of_another_version_is_drawn_beside_ours():
    recorder = Recorder('shadow')
    for name in ('twist', 'recorded'):
        recorder.declare(name, 'm/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz')
        recorder.note(name, 0, *np.zeros(6))
        recorder.note(name, 10 ** 9, *np.ones(6))
    (only,) = figures.drawings(recorder.record(Verdict(None, '')))
    assert 'recorded norm' in _words(only)
