# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Sizes, docstrings, headers and words."""

from __future__ import annotations

import ast
import re

import house_source as source
import pytest

MODULE_LINES, FUNCTION_LINES, NODE_LINES, OFTEN_LINES, TEST_LINES = 300, 60, 150, 40, 600
HEADER = ('# Copyright 2026 servo_nodes maintainers\n'
          '# SPDX-License-Identifier: Apache-2.0\n')
MODULES = [pytest.param(path, id=source.name_of(path)) for path in source.modules()]
EVERY = [pytest.param(path, id=source.name_of(path))
         for path in (*source.modules(), *source.tests())]


@pytest.mark.parametrize('path', EVERY)
def test_a_module_and_its_functions_stay_within_their_budgets(path):
    lines = path.read_text(encoding='utf-8').count('\n')
    if source.PACKAGE not in path.parents:
        limit = TEST_LINES
    else:
        limit = NODE_LINES if path.name.endswith('_node.py') else MODULE_LINES
    assert lines <= limit, f'{lines} lines'
    for node in source.functions(source.tree_of(path)):
        assert source.length_of(node) <= FUNCTION_LINES, f'{node.name}: {source.length_of(node)}'


def test_almost_all_functions_fit_on_half_a_screen():
    lengths = [source.length_of(node) for path in source.modules()
               for node in source.functions(source.tree_of(path))]
    longer = sum(length > OFTEN_LINES for length in lengths)
    assert longer <= 0.02 * len(lengths), f'{longer} of {len(lengths)} exceed {OFTEN_LINES} lines'
    assert sorted(lengths)[len(lengths) // 2] <= 12


@pytest.mark.parametrize('path', EVERY)
def test_a_module_names_its_owner_and_licence_and_says_what_it_is(path):
    text = path.read_text(encoding='utf-8')
    assert text.startswith(HEADER)
    assert ast.get_docstring(source.tree_of(path))
    assert 'from __future__ import annotations' in text or not any(
        isinstance(node, (ast.FunctionDef, ast.ClassDef)) for node in source.tree_of(path).body)


def public(tree: ast.Module):
    """Yield the public functions, classes and methods of a module."""
    for node in tree.body:
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)):
            if node.name.startswith('_'):
                continue
            yield node
            if isinstance(node, ast.ClassDef):
                yield from (inner for inner in node.body
                            if isinstance(inner, (ast.FunctionDef, ast.AsyncFunctionDef))
                            and not inner.name.startswith('_'))


@pytest.mark.parametrize('path', MODULES)
def test_every_public_name_is_documented(path):
    for node in public(source.tree_of(path)):
        setter = any(ast.unparse(item).endswith('.setter') for item in node.decorator_list)
        assert setter or ast.get_docstring(node), f'{node.name}, line {node.lineno}'


def test_no_line_without_a_room():
    names = [source.name_of(path) for path in source.modules()]
    assert not [name for name in names if re.search(r'utils?|misc|common|helpers?', name)]


@pytest.mark.parametrize('path', MODULES)
def test_no_function_is_left_unfinished(path):
    for node in source.functions(source.tree_of(path)):
        body = [item for item in node.body if not (
            isinstance(item, ast.Expr) and isinstance(item.value, ast.Constant))]
        # Only a method may do nothing: a hook that its subclasses fill.
        assert body or ast.get_docstring(node), f'{node.name}: empty, and says nothing'
        assert 'NotImplementedError' not in ast.unparse(node), node.name


@pytest.mark.parametrize('path', [pytest.param(path, id=source.name_of(path))
                                  for path in source.kept_files()])
def test_no_file_carries_notes_to_self_or_paths_of_one_machine(path):
    text = path.read_text(encoding='utf-8')
    words = '|'.join(('TO' + 'DO', 'FIX' + 'ME', 'XX' + 'X', 'HA' + 'CK'))
    assert not re.findall(rf'\b({words})\b', text)
    homes = '|'.join(('work', 'root', 'tmp', 'Users', 'farm'))
    absolute = re.findall(rf'(?<![\w./~$}}-])/(?:{homes})/[\w.-]+', text)
    assert not absolute
    assert '\t' not in text or path.suffix not in ('.py', '.yaml', '.xml')
    assert text.endswith('\n') or not text


def test_prints_belong_to_the_tools():
    for path in source.modules():
        if source.room_of(path) in ('ros', 'offline'):
            continue
        for node in ast.walk(source.tree_of(path)):
            printed = isinstance(node, ast.Call) and ast.unparse(node.func) == 'print'
            assert not printed, f'{source.name_of(path)}:{node.lineno}'
