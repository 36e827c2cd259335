# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""`/diagnostics` every steady second, and at once when the level changes (REP 107)."""

from __future__ import annotations

import hashlib
import json
import math
import platform
import typing
from collections.abc import Mapping
from importlib import metadata

import cv2
import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue

from servo_nodes import wire
from servo_nodes.settings import Value

OK, WARN, ERROR = DiagnosticStatus.OK, DiagnosticStatus.WARN, DiagnosticStatus.ERROR


def version() -> str:
    """Return the installed version of this package."""
    try:
        return metadata.version('servo_nodes')
    except metadata.PackageNotFoundError:
        return 'not installed'


def versions() -> dict[str, str]:
    """Return what a report of trouble must name."""
    return {'version': version(), 'python': platform.python_version(), 'numpy': np.__version__,
            'opencv': cv2.__version__}


def parameter_hash(values: Mapping[str, Value]) -> str:
    """Return eight letters that are the same for the same parameters, so that runs can be told."""
    text = json.dumps(dict(values), sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:8]


def status(name: str, *, level: bytes, text: str, hardware_id: str,
           values: Mapping[str, object]) -> DiagnosticStatus:
    """Return a filled status; figures that are not finite are left out."""
    finite = {key: value for key, value in values.items()
              if not isinstance(value, float) or math.isfinite(value)}
    message = DiagnosticStatus()
    wire.fill_status(message, level=level, name=name, text=text, hardware_id=hardware_id,
                     values=finite, key_value=KeyValue)
    return message


class Diagnostics:
    """One task's line on `/diagnostics`.

    Parameters
    ----------
    node : rclpy.node.Node
    task : str, what the line is about; its name becomes `<node name>: <task>`
    """

    def __init__(self, node: typing.Any, task: str) -> None:
        self._node = node
        self.name = f'{node.get_fully_qualified_name().lstrip("/")}: {task}'
        self._level: bytes | None = None
        self._publisher = node.doors.publish(DiagnosticArray, '/diagnostics')

    def say(self, level: bytes, text: str, values: Mapping[str, object], *,
            on_change_only: bool = False) -> None:
        """Publish the line; `on_change_only` keeps it back while the level is as it was."""
        if on_change_only and level == self._level:
            return
        self._level = level
        message = DiagnosticArray()
        message.header.stamp = self._node.get_clock().now().to_msg()
        message.status = [status(self.name, level=level, text=text,
                                 hardware_id=self._node.get_fully_qualified_name(), values=values)]
        self._publisher.publish(message)
