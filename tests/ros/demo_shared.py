# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the tests of the demo share: its environment, and a look at its processes."""

from __future__ import annotations

import contextlib
import os
import pathlib
import time

ROOT = pathlib.Path(__file__).resolve().parents[2]


def environment():
    """Return an environment in which a process finds this package."""
    return {**os.environ, 'PYTHONPATH': os.pathsep.join(
        [str(ROOT), *filter(None, [os.environ.get('PYTHONPATH')])])}


def alive(pid):
    """Return whether a process runs; a zombie does not."""
    with contextlib.suppress(OSError):
        return pathlib.Path(f'/proc/{pid}/stat').read_text().rsplit(')', 1)[1].split()[0] != 'Z'
    return False


def gone(pids, seconds):
    """Return whether all processes have ended within some seconds."""
    until = time.monotonic() + seconds
    while any(map(alive, pids)):
        if time.monotonic() > until:
            return False
        time.sleep(0.02)
    return True


def children_of(pid):
    """Return the processes that a process started."""
    found = []
    for task in pathlib.Path(f'/proc/{pid}/task').iterdir():
        found += map(int, (task / 'children').read_text().split())
    return found
