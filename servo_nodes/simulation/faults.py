# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults between a source and the loop (being written)."""

from __future__ import annotations

from dataclasses import dataclass

from servo_nodes.settings import Checked, setting


@dataclass(frozen=True)
class FaultSettings(Checked):
    """What goes wrong on the way; all off by default."""

    delay: float = setting(0.0, unit='s', low=0.0, high=10.0, help='added to every message')
