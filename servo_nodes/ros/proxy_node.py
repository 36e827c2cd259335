# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A faulty line between a source and the loop, live or recorded: `input` to `output`.

Delay, loss, freezing, NaN, wrong stamps, duplicates and reordering are parameters `faults.*`,
which can be set while it runs: the same faults, and the same code, as in the simulator.
"""

from __future__ import annotations

import sys
import threading
import time
import typing
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from sensor_msgs.msg import Image as ImageMessage
from sensor_msgs.msg import PointCloud2, PointField

from servo_nodes import wire
from servo_nodes.ros.pacer import Pacer
from servo_nodes.ros.process import run
from servo_nodes.ros.shell import Shell
from servo_nodes.settings import Checked, group, setting
from servo_nodes.simulation.faults import (
    Channel,
    FaultSettings,
    Outcome,
    damaged_image,
    damaged_view,
)
from servo_nodes.values import Image, Stamp, View

RATE = 200.0


@dataclass(frozen=True)
class ProxySettings(Checked):
    """What passes, and what befalls it."""

    kind: str = setting('features', choices=('features', 'image'), fixed=True,
                        help='features: PointCloud2 of a tracker; image: raw images of a camera')
    seed: int = setting(1, low=0, high=2 ** 31 - 1, fixed=True,
                        help='draws the faults; the same number and messages, the same faults')
    faults: FaultSettings = group(FaultSettings)


class ProxyNode(Shell):
    """Passes messages through a faulty line."""

    def __init__(self) -> None:
        super().__init__('proxy', ProxySettings)
        self._lock = threading.Lock()

    def configure(self) -> str:
        """Open both ends."""
        settings = self.parameters[ProxySettings]
        self._line: Channel[typing.Any] = Channel(settings.faults,
                                                  np.random.default_rng(settings.seed))
        kind, read, self._written = {
            'features': (PointCloud2, wire.view_from_cloud, self._cloud),
            'image': (ImageMessage, wire.image_from_message, self._image)}[settings.kind]
        self._out = self.doors.publish(kind, 'output')
        self.doors.listen(kind, 'input', lambda message: self._take(read, message))
        return ''

    def activate(self) -> str:
        """Let messages through."""
        self._pacer = Pacer(RATE, self._deliver, self.fail, 'line')
        self._pacer.start()
        return ''

    def deactivate(self) -> str:
        """Let none through."""
        self._pacer.end()
        return ''

    def rest(self) -> None:
        """Stop."""
        if self.active:
            self.deactivate()

    def adopt(self, settings: Mapping[type, object]) -> str:
        """Let other faults apply from the next message on."""
        new = typing.cast('ProxySettings | None', settings.get(ProxySettings))
        if self.configured and new is not None:
            with self._lock:
                self._line.adopt(new.faults)
        return ''

    def _take(self, read: typing.Any, message: typing.Any) -> None:
        try:
            value = read(message)
        except ValueError as error:
            self.warn_seldom('input', f'input dropped: {error}')
            return
        with self._lock:
            self._line.put(value, value.stamp, time.monotonic_ns())

    def _deliver(self, now: Stamp, late: Stamp) -> None:
        with self._lock:
            due = self._line.take(now)
        for outcome, value in due:
            self._out.publish(self._written(value, outcome))

    def _cloud(self, view: View, outcome: Outcome) -> PointCloud2:
        message = PointCloud2()
        faults = self.parameters[ProxySettings].faults
        wire.fill_cloud(message, damaged_view(view, outcome, faults), PointField)
        return message

    def _image(self, image: Image, outcome: Outcome) -> ImageMessage:
        message = ImageMessage()
        faults = self.parameters[ProxySettings].faults
        wire.fill_image(message, replace(image, stamp=outcome.stamp, array=damaged_image(
            image.array, outcome, faults)))
        return message


def main() -> None:
    """Run the node."""
    sys.exit(run(ProxyNode))
