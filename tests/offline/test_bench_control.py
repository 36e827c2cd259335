# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The benchmark tool judges and reports; figures themselves are measured apart from tests."""

from __future__ import annotations

import json
import math
import sys
import types

import numpy as np
import pytest

from servo_nodes.offline import battery, bench, bench_control, laws_table


@pytest.mark.parametrize('figures, code', [
    ({'command_over_lstsq': 4.0, 'batch_over_single': 80.0, 'blocks_grown': 5.0}, 0),
    ({'command_over_lstsq': 5.5, 'batch_over_single': 80.0, 'blocks_grown': 5.0}, 1),
    ({'command_over_lstsq': 4.0, 'batch_over_single': 80.0, 'blocks_grown': math.nan}, 1),
    ({'command_over_lstsq': 4.0, 'batch_over_single': 80.0}, 1)])
def test_a_broken_bound_a_missing_figure_and_nan_give_exit_code_one(
        figures, code, monkeypatch, capsys, tmp_path):
    stand_in = types.SimpleNamespace(measure=lambda seed: {**figures, 'seed_used': float(seed)})
    monkeypatch.setitem(sys.modules, 'servo_nodes.offline.bench_control', stand_in)
    assert bench.main(['control', '--json', '--seed', '7', '--out', str(tmp_path)]) == code
    printed, words = capsys.readouterr()
    assert json.loads(printed)['seed_used'] == 7
    assert json.loads((tmp_path / 'bench_control.json').read_text())['seed_used'] == 7
    assert ('expected' in words) == bool(code)


def test_an_unknown_area_and_a_bad_folder_give_exit_code_two(monkeypatch, capsys, tmp_path):
    with pytest.raises(SystemExit) as stop:
        bench.main(['weather'])
    assert stop.value.code == 2
    stand_in = types.SimpleNamespace(measure=lambda seed: {})
    monkeypatch.setitem(sys.modules, 'servo_nodes.offline.bench_control', stand_in)
    (tmp_path / 'file').write_text('')
    assert bench.main(['control', '--out', str(tmp_path / 'file')]) == 2
    assert 'out: expected a folder' in capsys.readouterr().err
    assert bench.main(['control', '--seed', '-1']) == 2


def test_the_benchmark_measures_a_loop_that_moves():
    costs = bench_control.command_costs(np.random.default_rng(1), runs=1)
    assert 0 < costs.between < costs.fresh and costs.ratio > 0
    assert bench_control.batch_over_single(
        np.random.default_rng(1), starts=40, singles=2, steps=5) > 1


def test_the_batch_of_the_benchmark_comes_home():
    starts = battery.starts()[:5]
    ends = bench_control.flown(starts, 300)
    assert np.abs(ends - battery.home()).max() < 1e-3


def test_the_table_of_laws_replaces_only_what_is_between_its_markers():
    text = f'before\n{laws_table.BEGIN}\nold\n{laws_table.END}\nafter\n'
    assert laws_table.replaced(text, 'new') == text.replace('old', 'new')
    with pytest.raises(ValueError, match='expected one'):
        laws_table.replaced('no markers', 'new')


def test_the_table_of_laws_in_the_documentation_is_what_the_script_generates(request):
    assert laws_table.main([str(request.config.rootpath / 'DEVELOPERS.md'), '--check']) == 0
