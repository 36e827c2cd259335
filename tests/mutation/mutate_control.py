# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Deletes every row and guard of gate, states and controller, one at a time: a test must fail.

    python tests/mutation/mutate_control.py            all mutants, some minutes
    python tests/mutation/mutate_control.py --list     what would be done
    python tests/mutation/mutate_control.py gate:      those whose name contains the text
    python tests/mutation/mutate_control.py --quick    the self check: every tenth mutant

Each mutant lives in a child process only: the child imports the changed source in place of the
file and runs the tests of that module; no file is touched. Exits 1 when a mutant survives.
"""

from __future__ import annotations

import argparse
import ast
import dataclasses
import functools
import importlib.abc
import importlib.util
import os
import pathlib
import sys
import time
from collections.abc import Iterator

ROOT = pathlib.Path(__file__).resolve().parents[2]
ROOM = ROOT / 'servo_nodes' / 'control'
LOOP = ['test_controller', 'test_controller_holds', 'test_controller_faults']
TESTS = {
    'gate': ['test_gate', *LOOP],
    'states': ['test_states', *LOOP],
    'tool': ['test_caps', *LOOP, 'test_controller_settings'],
    'watch': ['test_gate_intake', *LOOP],
    'progress': ['test_gate_progress', *LOOP],
    'travel': ['test_gate_progress', *LOOP],
    'home': ['test_gate_home'],
    'survey': LOOP,
    'surroundings': LOOP,
    'settings': ['test_controller_settings'],
    'controller': [*LOOP, 'test_controller_orders'],
}

@dataclasses.dataclass(frozen=True)
class Mutant:
    """One change of one module."""

    module: str
    name: str
    source: str

    @property
    def label(self) -> str:
        """Return the name by which a mutant is chosen."""
        return f'{self.module}:{self.name}'


def _changed(tree: ast.Module, node: ast.AST, replacement: ast.AST | None) -> str:
    """Return the source with `node` replaced, or left out; the tree is as before afterwards."""
    for parent in ast.walk(tree):
        for field, value in ast.iter_fields(parent):
            if value is node:
                new: object = replacement
            elif isinstance(value, list) and any(item is node for item in value):
                place = next(k for k, item in enumerate(value) if item is node)
                new = value[:place] + [replacement] * (replacement is not None) + value[place + 1:]
            else:
                continue
            setattr(parent, field, new)
            try:
                return ast.unparse(ast.fix_missing_locations(tree))
            finally:
                setattr(parent, field, value)
    raise ValueError(f'expected a node of the tree, got {ast.dump(node)}')


def _functions(tree: ast.Module) -> Iterator[ast.FunctionDef]:
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef) and not node.name.startswith('__'):
            yield node


def _rows(tree: ast.Module) -> Iterator[tuple[str, ast.AST, ast.AST | None]]:
    """Leave out each element of a tuple named TABLE."""
    for node in tree.body:
        names = ([node.target] if isinstance(node, ast.AnnAssign) else
                 node.targets if isinstance(node, ast.Assign) else [])
        if any(isinstance(name, ast.Name) and name.id == 'TABLE' for name in names):
            table = node.value  # type: ignore[attr-defined]
            for row in table.elts:
                yield f'row {ast.unparse(row)[:70]}', row, None


def _changes(function: ast.FunctionDef) -> Iterator[tuple[str, ast.AST, ast.AST | None]]:
    """Switch off each guard, each part of it, each clamp and each statement of a function."""
    for node in ast.walk(function):
        if isinstance(node, (ast.If, ast.IfExp)):
            yield f'{_words(node)}: never', node.test, ast.Constant(False)
        if isinstance(node, ast.BoolOp):
            whole = isinstance(node.op, ast.And)
            for place, part in enumerate(node.values):
                yield (f'{_words(node)}: part {place + 1} left out', part, ast.Constant(whole))
        if (isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
                and node.func.id in ('min', 'max') and len(node.args) > 1):
            for place, part in enumerate(node.args):
                yield f'{_words(node)}: argument {place + 1} alone', node, part
        if isinstance(node, ast.Expr) and isinstance(node.value, ast.Call):
            yield f'{_words(node)}: left out', node, ast.Pass()


def _words(node: ast.AST) -> str:
    head = node.test if isinstance(node, (ast.If, ast.IfExp)) else node
    return f'{"if " if isinstance(node, ast.If) else ""}{ast.unparse(head)[:70]}'


@functools.cache
def mutants(module: str) -> list[Mutant]:
    """Return every mutant of a module, each with a name that is its own."""
    tree = ast.parse((ROOM / f'{module}.py').read_text(encoding='utf-8'))
    found = [Mutant(module, name, _changed(tree, node, new)) for name, node, new in _rows(tree)]
    for function in _functions(tree):
        if module == 'gate' and function.args.args[:1] and ast.unparse(
                function.args.args[0]) == 's: Situation':
            empty = ast.FunctionDef(function.name, function.args, [ast.Return(ast.Constant(0))],
                                    [], function.returns)
            found.append(Mutant(module, f'{function.name}: empty',
                                _changed(tree, function, empty)))
        found += [Mutant(module, f'{function.name}:{name}', _changed(tree, node, new))
                  for name, node, new in _changes(function)]
    numbered: dict[str, int] = {}
    for place, mutant in enumerate(found):
        numbered[mutant.name] = count = numbered.get(mutant.name, 0) + 1
        if count > 1:
            found[place] = dataclasses.replace(mutant, name=f'{mutant.name} ({count})')
    return found


class _Swapped(importlib.abc.MetaPathFinder, importlib.abc.InspectLoader):
    """Imports a mutant in place of its module."""

    def __init__(self, mutant: Mutant) -> None:
        self.name, self.mutant = f'servo_nodes.control.{mutant.module}', mutant

    def find_spec(self, fullname, path=None, target=None):  # type: ignore[no-untyped-def]
        """Return this loader for the one module."""
        return importlib.util.spec_from_loader(fullname, self) if fullname == self.name else None

    def get_source(self, fullname: str) -> str:
        """Return the changed source."""
        return self.mutant.source

    def is_package(self, fullname: str) -> bool:
        """Return False: modules only."""
        return False


def survives(mutant: Mutant | None, tests: list[str]) -> bool:
    """Return whether the tests pass, in a child process, with the mutant (None: as it is)."""
    child = os.fork()
    if child:
        return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0
    code = 1
    try:
        nothing = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nothing, 1)
        os.dup2(nothing, 2)
        import pytest
        if mutant is not None:
            sys.meta_path.insert(0, _Swapped(mutant))
        code = int(pytest.main([
            '-x', '-q', '--tb=no', '-p', 'no:cacheprovider', '--import-mode=importlib',
            '--rootdir', str(ROOT), '-c', os.devnull,
            *(str(ROOT / 'tests' / 'control' / f'{name}.py') for name in tests)]))
    finally:
        os._exit(code)


def _warmed() -> None:
    """Import once what every child needs and no mutant touches."""
    import cv2  # noqa: F401
    import hypothesis.stateful  # noqa: F401
    import numpy  # noqa: F401
    import pytest  # noqa: F401
    import scipy.linalg  # noqa: F401

    import servo_nodes.control.servo  # noqa: F401

def main(arguments: list[str] | None = None) -> int:
    """Run the mutants and report; return 1 when one survives that should not."""
    parser = argparse.ArgumentParser(description=__doc__.split('\n')[0])
    parser.add_argument('text', nargs='?', default='', help='only mutants named like this')
    parser.add_argument('--list', action='store_true', help='print the names and stop')
    parser.add_argument('--quick', action='store_true', help='every tenth mutant')
    options = parser.parse_args(arguments)
    chosen = [mutant for module in TESTS for mutant in mutants(module)
              if options.text in mutant.label][::10 if options.quick else 1]
    if options.list:
        print('\n'.join(mutant.label for mutant in chosen))
        return 0
    sys.path.insert(0, str(ROOT))
    os.chdir(ROOT)
    _warmed()
    for module in dict.fromkeys(mutant.module for mutant in chosen):
        if not survives(None, TESTS[module]):
            print(f'{module}: expected its tests to pass before any change, got a failure')
            return 1
    alive, began = [], time.monotonic()
    for mutant in chosen:
        if survives(mutant, TESTS[mutant.module]):
            alive.append(mutant.label)
            print(f'survived: {mutant.label}', flush=True)
    print(f'{len(chosen)} mutants, {len(alive)} survived, {time.monotonic() - began:.0f} s')
    return 1 if alive else 0


if __name__ == '__main__':
    sys.exit(main())
