# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the tests of the leaves share."""

from __future__ import annotations

import types

import message_shapes
import pytest


@pytest.fixture(params=['look_alike', 'real'])
def messages(request) -> types.SimpleNamespace:
    """Return makers of messages, of both kinds in turn."""
    if request.param == 'look_alike':
        return message_shapes.look_alikes()
    return message_shapes.real()
