# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The package as text: what the house tests read."""

from __future__ import annotations

import ast
import functools
import subprocess
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / 'servo_nodes'
ROOMS = ('tracking', 'control', 'simulation', 'report', 'ros', 'offline')
TEXT_SUFFIXES = {'.py', '.md', '.xml', '.yaml', '.yml', '.cfg', '.toml', '.policy', '.rviz'}
BUILT = ('build', 'install', 'log', '__pycache__')
PACKAGES = ('servo_nodes', *(f'servo_nodes.{room}' for room in ROOMS))


def modules() -> list[Path]:
    """Return every module of the package."""
    return sorted(PACKAGE.rglob('*.py'))


def tests() -> list[Path]:
    """Return every module of the tests."""
    return sorted((ROOT / 'tests').rglob('*.py'))


def name_of(path: Path) -> str:
    """Return the path from the project's root, as text."""
    return path.relative_to(ROOT).as_posix()


@functools.cache
def tree_of(path: Path) -> ast.Module:
    """Return the syntax tree of a module."""
    return ast.parse(path.read_text(encoding='utf-8'), str(path))


def room_of(path: Path) -> str:
    """Return the room of a module: its folder, or its own name among the leaves."""
    inner = path.relative_to(PACKAGE)
    return inner.parts[0] if len(inner.parts) > 1 else inner.stem


def imported(path: Path) -> Iterator[tuple[str, int, bool]]:
    """Yield (dotted name, line, late) of every import; late ones stand inside a function."""
    tree = tree_of(path)
    late = {id(inner) for node in ast.walk(tree)
            if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.Lambda))
            for inner in ast.walk(node)}
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node.lineno, id(node) in late
        elif isinstance(node, ast.ImportFrom):
            if node.level:
                yield '.' * node.level + (node.module or ''), node.lineno, id(node) in late
            elif node.module in PACKAGES:
                for alias in node.names:
                    yield f'{node.module}.{alias.name}', node.lineno, id(node) in late
            else:
                yield node.module or '', node.lineno, id(node) in late


def functions(tree: ast.Module) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    """Yield every function and method, nested ones too."""
    for node in ast.walk(tree):
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef)):
            yield node


def length_of(node: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """Return the lines of a function, decorators left out."""
    return (node.end_lineno or node.lineno) - node.lineno + 1


def kept_files() -> list[Path]:
    """Return every text file that belongs to the project."""
    try:
        listed = subprocess.run(['git', 'ls-files', '-co', '--exclude-standard'], cwd=ROOT,
                                capture_output=True, text=True, check=True, timeout=60).stdout
        paths = [ROOT / line for line in listed.splitlines()]
    except (OSError, subprocess.SubprocessError):
        paths = [path for path in ROOT.rglob('*')
                 if not any(part.startswith('.') or part in BUILT or part.endswith('.egg-info')
                            for part in path.relative_to(ROOT).parts)]
    return sorted(path for path in paths
                  if path.is_file() and path.suffix in TEXT_SUFFIXES | {''})

