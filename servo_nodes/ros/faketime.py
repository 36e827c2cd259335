# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Finds libfaketime, which lets the drill set the system clock of single processes."""

from __future__ import annotations

import importlib.util
import os
import pathlib

NAME = 'libfaketime.so.1'
PLACES = ('/usr/lib/*/faketime', '/usr/lib/faketime', '/usr/local/lib/faketime')


def library() -> pathlib.Path | None:
    """Return its path: named by LIBFAKETIME, of the distribution, or of the Python package."""
    named = os.environ.get('LIBFAKETIME', '')
    if named:
        return pathlib.Path(named) if pathlib.Path(named).is_file() else None
    for place in PLACES:
        for found in pathlib.Path('/').glob(f'{place[1:]}/{NAME}'):
            return found
    package = importlib.util.find_spec('libfaketime')
    for folder in (package.submodule_search_locations or ()) if package else ():
        for found in pathlib.Path(folder).rglob(NAME):
            return found
    return None
