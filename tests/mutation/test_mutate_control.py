# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The script that leaves out rows and guards finds them all, and tells dead from alive."""

from __future__ import annotations

import ast
import subprocess
import sys

import pytest

from servo_nodes.control import gate, states
from tests.mutation.mutate_control import ROOM, ROOT, TESTS, mutants


@pytest.mark.parametrize('module', TESTS)
def test_every_mutant_is_a_program_of_its_own_under_a_name_of_its_own(module):
    found = mutants(module)
    original = ast.unparse(ast.parse((ROOM / f'{module}.py').read_text(encoding='utf-8')))
    assert len({mutant.name for mutant in found}) == len(found)
    for mutant in found:
        compile(mutant.source, mutant.name, 'exec')
        assert mutant.source != original


def test_each_row_of_both_tables_and_each_predicate_is_left_out_once():
    names = [mutant.name for mutant in mutants('gate')]
    assert sum(name.startswith('row ') for name in names) == len(gate.TABLE)
    predicates = [name for name, value in vars(gate).items() if name.startswith('_')
                  and getattr(value, '__annotations__', {}).get('s') == 'Situation']
    emptied = {name.split(':')[0] for name in names if name.endswith(': empty')}
    assert len(predicates) > 15 and emptied >= set(predicates)
    rows = [mutant for mutant in mutants('states') if mutant.name.startswith('row ')]
    assert len(rows) == len(states.TABLE)


def test_a_mutant_dies_by_its_tests_and_the_original_lives():
    program = (
        'import sys; sys.path.insert(0, "."); from tests.mutation.mutate_control import *\n'
        'row = next(m for m in mutants("states") if "State.FAULTED, Event.RESET" in m.name)\n'
        'print(survives(None, ["test_states"]), survives(row, ["test_states"]))\n')
    done = subprocess.run([sys.executable, '-c', program], cwd=ROOT, capture_output=True,
                          text=True, timeout=300)
    assert done.stdout.split() == ['True', 'False'], done.stderr
