# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The drill: its table, its page, its exit codes, and some of its rows for real."""

from __future__ import annotations

import json
import math
import re

import pytest

from servo_nodes.ros import drill, drill_page
from servo_nodes.ros.drill_bench import Measured


def test_the_table_has_every_fault_once_and_in_order():
    assert [fault.ident for fault in drill.TABLE[:8]] == [f'F{i}' for i in range(1, 9)]
    assert sorted(int(fault.ident[1:]) for fault in drill.TABLE) == list(range(1, 30))


def test_no_hold_may_take_longer_than_a_quarter_of_a_second():
    bounds = {fault.ident: fault.bound_s for fault in drill.TABLE}
    for ident in ('F1', 'F2', 'F3', 'F4', 'F6', 'F8', 'F10', 'F12'):
        assert bounds[ident] == 0.25


@pytest.mark.parametrize('argv', [['--rows', 'F1,F99'], ['--runs', '0'], ['--domain', '400']])
def test_unusable_options_are_one_sentence_and_exit_code_two(argv, capsys):
    assert drill.run(argv) == 2
    assert len(capsys.readouterr().err.splitlines()) == 1


class Still:
    """Stands for a bench that is always ready."""

    def ready(self):
        """Be ready."""


@pytest.mark.parametrize(('seconds', 'ok', 'good'), [
    (0.1, True, True), (0.3, True, False), (0.1, False, False), (math.inf, True, False),
    (math.nan, True, False)])
def test_a_row_holds_only_when_every_run_is_right_and_within_the_bound(seconds, ok, good):
    runs = iter([Measured(0.05, True), Measured(seconds, ok, 'second')])
    fault = drill.Fault('F1', 'fault', 'zero', 0.25, lambda bench, run: next(runs))
    row = drill._row(Still(), fault, 2)
    assert row['ok'] is good and row['runs'] == 2
    assert row['worst_s'] is None or row['worst_s'] == max(0.05, seconds)


def test_the_page_shows_each_row_its_worst_figure_and_what_was_not_run():
    text = drill_page.page([
        {'id': 'F1', 'fault': 'a <b>', 'reaction': 'zero', 'bound_s': 0.25, 'worst_s': 0.2,
         'runs': 3, 'ok': True, 'note': ''},
        {'id': 'F2', 'fault': 'c', 'reaction': 'zero', 'bound_s': 0.25, 'worst_s': None,
         'runs': 3, 'ok': False, 'note': 'it still moves'},
        {'id': 'F9', 'fault': 'd', 'reaction': 'gap', 'bound_s': 0.04, 'worst_s': None,
         'runs': 0, 'ok': None, 'note': 'needs libfaketime'}])
    assert 'a &lt;b&gt;' in text and '200 ms' in text and 'it still moves' in text
    assert '1 of 3 rows failed; 1 not run' in text
    assert not re.search(r'(src|href)=', text)


@pytest.mark.processes
def test_rows_of_the_drill_hold_here(capsys, tmp_path, free_domain_number):
    """A killed tracker, a lost target and a terminated controller, with real processes."""
    code = drill.run(['--rows', 'F1,F3,F17', '--runs', '1', '--json', '--out', str(tmp_path),
                      '--domain', str(free_domain_number)])
    said = capsys.readouterr()
    faults = json.loads(said.out)['faults']
    assert [row['id'] for row in faults] == ['F1', 'F3', 'F17']
    assert all(set(row) >= {'id', 'fault', 'reaction', 'bound_s', 'worst_s', 'runs', 'ok'}
               for row in faults)
    assert code == 0, said.err
    assert (tmp_path / 'drill.html').read_text().startswith('<!DOCTYPE html>')
