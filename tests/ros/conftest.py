# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Rigs for the tests: each has a ROS domain of its own, also when several runs share a machine."""

from __future__ import annotations

import contextlib
import fcntl
import pathlib
import tempfile

import pytest

pytest.importorskip('rclpy', reason='ROS 2 is not installed here')

DOMAINS = range(60, 80)


@contextlib.contextmanager
def free_domain():
    """Yield a ROS domain that nobody else on this machine uses for now."""
    for number in DOMAINS:
        path = pathlib.Path(tempfile.gettempdir()) / f'servo_nodes_domain_{number}.lock'
        with path.open('w') as file:
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                continue
            yield number
            return
    pytest.skip(f'no free ROS domain among {DOMAINS.start} to {DOMAINS.stop - 1}')


@pytest.fixture
def rig():
    """Return a rig whose processes end with the test."""
    from servo_nodes.ros.rig import Rig
    with free_domain() as domain, Rig(domain) as made:
        yield made


@pytest.fixture(scope='module')
def module_rig():
    """Return a rig whose processes end with the module."""
    from servo_nodes.ros.rig import Rig
    with free_domain() as domain, Rig(domain) as made:
        yield made


@pytest.fixture
def free_domain_number():
    """Return a ROS domain for a tool that makes its own rig."""
    with free_domain() as domain:
        yield domain
