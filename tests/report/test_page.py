# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The page says first what came of the run, asks nobody for anything, and can be mailed."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import pytest

from servo_nodes.report import page
from servo_nodes.report.figures import drawings
from servo_nodes.report.record import Event, Recorder, Verdict
from tests.report.runs import record_of_a_run

pytest.importorskip('matplotlib', reason='the page needs the report extra')


class _Reader(HTMLParser):
    """Collects words, and whatever could make a browser ask for something."""

    def __init__(self, text):
        super().__init__()
        self.asks, self.open, self.words = [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        if tag not in ('meta', 'img', 'br'):
            self.open.append(tag)
        self.asks += [value for name, value in attributes
                      if name in ('src', 'href', 'srcset', 'action', 'data', 'poster')]
        assert tag not in ('script', 'link', 'iframe', 'object', 'embed')

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != 'style':
            self.words.append(data.strip())


@pytest.fixture(scope='module')
def html():
    run = record_of_a_run()
    return page.page(run, drawings(run))


def test_the_page_asks_nobody_for_anything(html):
    reader = _Reader(html)
    assert len(reader.asks) >= 8
    assert all(ask.startswith(('data:image/png', 'data:image/jpeg', 'data:image/svg'))
               for ask in reader.asks)
    assert "default-src 'none'; img-src data:" in html
    assert not re.search(r'url\(|@import|https?://', re.sub(r'base64,[^"]*', '', html))


def test_the_page_is_well_formed_and_small_enough_to_mail(html):
    reader = _Reader(html)
    assert reader.open == []
    assert len(html) < 1_500_000


def test_the_verdict_comes_before_everything_else(html):
    words = [word for word in _Reader(html).words if word]
    assert words.index('It came home.') <= 4
    assert words.index('It came home.') < words.index('Every stop')


def test_a_stop_is_told_with_its_moment_its_reason_and_its_reaction_time(html):
    row = re.search(r'<table class="stops">.*?</table>', html, re.DOTALL).group()
    for word in ('holding', '2.10 s', 'features silent', 'no features for 0.120 s', '190 ms',
                 '70 ms', '0.90 s'):
        assert word in row


def test_pictures_around_a_stop_stand_together_in_order(html):
    around = html[html.index('Around features silent at 2.10 s'):]
    assert 0 < around.index('2.08 s: just before') < around.index('2.60 s: held')


def test_the_latency_budget_has_a_row_for_each_stage_and_one_for_all(html):
    table = re.search(r'<table class="latency">.*?</table>', html, re.DOTALL).group()
    assert re.findall(r'<tr><td>(.*?)</td>', table) == [
        'image to features', 'features to command', 'together']


def test_facts_and_cautions_are_on_the_page(html):
    words = _Reader(html).words
    assert 'seed' in words and 'true' in words
    assert any('not a safety-rated function' in word for word in words)


@pytest.mark.parametrize(('ok', 'kind'), [(True, 'good'), (False, 'bad'), (None, 'open')])
def test_good_bad_and_unjudged_look_different(ok, kind):
    text = page.page(record_of_a_run(Verdict(ok, 'So it went.')), [])
    assert f'<header class="{kind}">' in text


def test_a_run_without_stops_says_so():
    recorder = Recorder('calm')
    recorder.turn(Event(0, 'servoing'))
    assert 'No stop in this run.' in page.page(recorder.record(Verdict(True, 'Home.')), [])


def test_words_from_outside_cannot_become_markup():
    wild = '<script>alert("1")</script>'
    recorder = Recorder(wild)
    recorder.turn(Event(0, 'holding', wild, wild))
    recorder.facts = {wild: {wild: wild}}
    text = page.page(recorder.record(Verdict(False, wild, wild)), [])
    assert '<script' not in text
    _Reader(text)


def test_the_same_record_gives_the_same_page(html):
    run = record_of_a_run()
    assert page.page(run, drawings(run)) == html


def test_the_page_is_written_where_it_should_be(tmp_path):
    page.write(record_of_a_run(), tmp_path / 'report.html')
    assert (tmp_path / 'report.html').read_text().startswith('<!DOCTYPE html>')


def test_a_run_of_many_stops_lists_the_first_and_counts_the_rest():
    recorder = Recorder('shaky')
    for index in range(page.MOST_STOPS + 3):
        recorder.turn(Event(2 * index, 'holding', 'overrun'))
        recorder.turn(Event(2 * index + 1, 'servoing'))
    text = page.page(recorder.record(Verdict(None, '')), [])
    assert text.count('<td class="chip">') == page.MOST_STOPS
    assert 'and 3 more' in text
