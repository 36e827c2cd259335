# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A record keeps what a run left, and comes back from its file as it was."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes.report import record
from servo_nodes.report.record import Event, Picture, Recorder, Series, Verdict
from tests.report.runs import ORIGIN, SECOND, record_of_a_run


def test_a_record_comes_back_from_its_file_as_it_was(tmp_path):
    run = record_of_a_run()
    record.save(run, tmp_path / 'record.json')
    again = record.load(tmp_path / 'record.json')
    assert (again.title, again.verdict, again.facts) == (run.title, run.verdict, run.facts)
    assert list(again.events) == list(run.events)
    assert list(again.pictures) == list(run.pictures)
    for name, series in run.series.items():
        assert again.series[name].labels == series.labels
        np.testing.assert_array_equal(again.series[name].times, series.times)
        np.testing.assert_allclose(again.series[name].values, series.values, rtol=1e-8)
    for before, after in zip(run.paths, again.paths, strict=True):
        np.testing.assert_allclose(after.pixels_uv, before.pixels_uv, rtol=1e-8)


def test_the_same_run_gives_the_same_bytes_and_another_one_other_bytes():
    assert record.to_json(record_of_a_run()) == record.to_json(record_of_a_run())
    other = record_of_a_run(Verdict(False, 'It did not come home.'))
    assert other.digest() != record_of_a_run().digest()


@given(st.lists(st.floats(allow_nan=True, allow_infinity=True, width=32), max_size=8))
def test_what_is_not_finite_becomes_null_in_valid_json_and_nan_again(values):
    recorder = Recorder('numbers')
    recorder.declare('error', 'px', 'error')
    for index, value in enumerate(values):
        recorder.note('error', index, value)
    text = record.to_json(recorder.record(Verdict(None, '')))
    json.loads(text, parse_constant=lambda word: pytest.fail(f'{word} is no JSON'))
    again = record.from_json(text).series
    expected = [value if np.isfinite(value) else np.nan for value in values]
    if values:
        np.testing.assert_allclose(again['error'].values[:, 0], expected, rtol=1e-8)


def test_rows_that_come_out_of_order_are_put_in_order():
    recorder = Recorder('order')
    recorder.declare('error', 'px', 'error')
    for stamp in (30, 10, 20):
        recorder.note('error', stamp, stamp / 10)
    series = recorder.record(Verdict(None, '')).series['error']
    assert series.times.tolist() == [10, 20, 30]
    assert series.column('error').tolist() == [1, 2, 3]


def test_an_event_counts_only_when_state_or_reason_change():
    recorder = Recorder('events')
    for event in (Event(1, 'servoing'), Event(2, 'servoing', text='still'),
                  Event(3, 'holding', 'image_silent'), Event(4, 'holding', 'too_few_points')):
        recorder.turn(event)
    assert [event.stamp for event in recorder.events] == [1, 3, 4]


def test_a_point_that_is_lost_and_found_keeps_one_path():
    recorder = Recorder('paths')
    recorder.points(1, [4, 9], [[1, 2], [3, 4]], [[10, 20], [30, 40]])
    recorder.points(2, [9], [[5, 6]], [[30, 40]])
    first, second = recorder.record(Verdict(None, '')).paths
    assert (first.ident, second.ident) == (4, 9)
    assert first.times.tolist() == [1]
    assert second.pixels_uv.tolist() == [[3, 4], [5, 6]]
    assert second.goal_uv.tolist() == [30, 40]


def test_the_record_spans_from_its_first_to_its_last_moment():
    run = record_of_a_run()
    assert (run.origin, run.end) == (ORIGIN, ORIGIN + 6 * SECOND)
    nothing = Recorder('nothing').record(Verdict(None, ''))
    assert (nothing.origin, nothing.end) == (0, 0)


@pytest.mark.parametrize(('times', 'values', 'words'), [
    ([1, 2], [[1.0]], '2 rows of 1 values'), ([2, 1], [[1.0], [2.0]], 'do not fall')])
def test_a_series_refuses_what_does_not_fit(times, values, words):
    with pytest.raises(ValueError, match=words):
        Series('px', ('error',), np.array(times), np.array(values))


def test_a_picture_tells_its_media_and_refuses_other_bytes():
    assert Picture('goal', 0, '', b'\x89PNG....').media == 'image/png'
    assert Picture('goal', 0, '', b'\xff\xd8\xff....').media == 'image/jpeg'
    with pytest.raises(ValueError, match="picture 'goal': expected PNG or JPEG bytes, got"):
        _ = Picture('goal', 0, '', b'GIF89a').media


def _spoilt(**changes):
    page = json.loads(record.to_json(record_of_a_run()))
    page.update(changes)
    return json.dumps(page)


@pytest.mark.parametrize('text', [
    'no JSON', '[]', '{}', _spoilt(format=2), _spoilt(series={'error': {}}),
    _spoilt(events=[['soon', 'servoing']]), _spoilt(paths=[[1, [0, 0], [1, 2], [[1]]]]),
    _spoilt(image_size=[640]), _spoilt(verdict=None), _spoilt(facts=[1])])
def test_a_file_that_no_run_wrote_is_refused_in_one_sentence_naming_it(tmp_path, text):
    (tmp_path / 'record.json').write_text(text)
    with pytest.raises(ValueError, match=r'record\.json: record: expected what a run wrote, got'):
        record.load(tmp_path / 'record.json')


def test_an_absent_or_oversized_file_is_refused_in_one_sentence(tmp_path, monkeypatch):
    with pytest.raises(ValueError, match=r'absent\.json: .*No such file'):
        record.load(tmp_path / 'absent.json')
    record.save(record_of_a_run(), tmp_path / 'record.json')
    monkeypatch.setattr(record, 'MOST_BYTES', 100)
    with pytest.raises(ValueError, match='expected at most 100 bytes, got'):
        record.load(tmp_path / 'record.json')
