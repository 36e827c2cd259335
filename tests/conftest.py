# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What every test shares: reproducible properties, isolation on the network, recorded data."""

from __future__ import annotations

import importlib.util
import os
from pathlib import Path

import pytest
from hypothesis import settings

ROOT = Path(__file__).resolve().parent.parent

# The same examples on every run; no clock decides whether a test passes.
settings.register_profile('house', derandomize=True, deadline=None, max_examples=100)
# For the second and third set of releases: `pytest --hypothesis-profile=brief`.
settings.register_profile('brief', derandomize=True, deadline=None, max_examples=20)
settings.load_profile('house')

# A test must never reach a robot: neither another machine nor another run on this one.
os.environ.setdefault('ROS_DOMAIN_ID', '97')
os.environ['ROS_AUTOMATIC_DISCOVERY_RANGE'] = 'LOCALHOST'


# Where there is no ROS 2, what needs it is left out as a whole, and the header says so.
HAS_ROS = importlib.util.find_spec('rclpy') is not None
collect_ignore = [] if HAS_ROS else ['ros']


def pytest_report_header() -> str:
    """Say what is left out."""
    return 'ROS 2: found' if HAS_ROS else 'ROS 2: not installed, tests/ros is left out'


@pytest.fixture(scope='session')
def shared_data() -> Path:
    """Return the folder of real recordings that lies beside the project, or skip."""
    folder = ROOT.parent / 'shared' / 'data'
    if not folder.is_dir():
        pytest.skip('the recordings beside the project (../shared/data) are absent')
    return folder
