# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The bench of the drill: a moving loop whose features pass through our hands."""

from __future__ import annotations

import copy
import math
import pathlib
import signal
import threading
import time
import typing
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.qos import QoSProfile
from rclpy.serialization import deserialize_message
from sensor_msgs.msg import PointCloud2

from servo_nodes.ros.rig import NAMESPACE, Rig
from servo_nodes.ros.trial import FAR, Trial
from servo_nodes.values import SECOND_NS, Stamp

RATE = 50.0
PERIOD_S = 1.0 / RATE
LINEAR, ANGULAR = 0.05, 0.25
Change = Callable[[PointCloud2], PointCloud2 | None]

# Lets a file make one function of the controller's process raise: a fault of ours, on demand.
RAISING = """
import os
from servo_nodes import wire
read, flag = wire.view_from_cloud, {flag!r}
def failing(message):
    if os.path.exists(flag):
        raise RuntimeError('injected by the drill')
    return read(message)
wire.view_from_cloud = failing
from servo_nodes.ros.controller_node import main
main()
"""


@dataclass(frozen=True)
class Measured:
    """What one run of a row came to: the seconds that are bounded, whether all else was right."""

    seconds: float
    ok: bool
    note: str = ''


class Relay:
    """Passes features on, unchanged or changed, in a thread of its own."""

    def __init__(self, rig: Rig) -> None:
        self.change: Change | None = None
        self.last_good: Stamp = 0
        self.count = 0
        self._context = rig.node.context
        self._node = Node('relay', context=self._context, namespace=NAMESPACE)
        self._out = self._node.create_publisher(PointCloud2, 'features_relayed', 1)
        self._node.create_subscription(PointCloud2, 'features', self._take, QoSProfile(depth=1),
                                       raw=True)
        self._executor = SingleThreadedExecutor(context=self._context)
        self._executor.add_node(self._node)
        self._ended = False
        self._thread = threading.Thread(target=self._spin, daemon=True)
        self._thread.start()

    def close(self) -> None:
        """Stop passing anything on."""
        self._ended = True
        self._thread.join(1.0)
        self._executor.shutdown(timeout_sec=0.5)
        self._node.destroy_node()

    def _spin(self) -> None:
        while not self._ended:
            self._executor.spin_once(timeout_sec=0.1)

    def _take(self, raw: bytes) -> None:
        change = self.change
        if change is None:
            self._out.publish(raw)
            self.last_good = time.monotonic_ns()
            self.count += 1
            return
        changed = change(deserialize_message(raw, PointCloud2))
        if changed is not None:
            self._out.publish(changed)


class Bench:
    """One loop for many faults; what a fault broke is built anew before the next.

    Parameters
    ----------
    rig : Rig
    rng : numpy.random.Generator
    simulated_time : bool, the simulator leads the time and the others follow
    faketime : path of libfaketime, or None
    """

    def __init__(self, rig: Rig, rng: np.random.Generator, *, simulated_time: bool = False,
                 faketime: pathlib.Path | None = None) -> None:
        self.rig, self.rng = rig, rng
        self.flag = rig.folder / 'raise'
        self.offset = rig.folder / 'offset'
        self.offset.write_text('+0\n')
        node_env: dict[str, str] = {}
        if faketime is not None:
            node_env = {'LD_PRELOAD': str(faketime), 'FAKETIME_TIMESTAMP_FILE': str(self.offset),
                        'FAKETIME_CACHE_DURATION': '1', 'DONT_FAKE_MONOTONIC': '1',
                        'FAKETIME_DONT_FAKE_MONOTONIC': '1'}
        follow = {'use_sim_time': True} if simulated_time else {}
        self.relay = Relay(rig)
        self.trial = Trial(
            rig, controller={'law__gain': 0.5, 'caps__linear': LINEAR, 'caps__angular': ANGULAR,
                             'rate': RATE, **follow},
            tracker=dict(follow), simulator={'clock__lead': True} if simulated_time else {},
            remap={'controller': {'features': 'features_relayed'}},
            env=dict.fromkeys(('tracker', 'controller', 'simulator'), node_env),
            code={'controller': RAISING.format(flag=str(self.flag))})
        self.observer = self.trial.observer
        self._taught = False

    def close(self) -> None:
        """Take the relay down; the rig ends the processes."""
        self.relay.close()

    def ready(self) -> None:
        """Have everything run, taught, sent away, engaged and moving."""
        self.relay.change = None
        self.flag.unlink(missing_ok=True)
        for node, child in self.trial.nodes.items():
            if child.runs:
                child.send(signal.SIGCONT)
            else:
                self.trial.start(node)
        if not self._taught:
            self.trial.teach()
            self._taught = True
        self.trial.stop()
        self.observer.commands.clear()
        self.trial.go(FAR)
        self.rig.watch(0.3)

    def stopped(self, at: Stamp, reasons: tuple[str, ...], *, watch: float = 0.35,
                timeout: float = 5.0) -> Measured:
        """Wait for the zeros after a fault at `at`, and for one of the reasons."""
        try:
            self.rig.until(lambda: set(reasons) & set(self.observer.reasons_since(at)), timeout,
                           what=' or '.join(reasons))
        except TimeoutError as error:
            return Measured(math.inf, False, f'{error}; got {self.observer.reason}')
        self.rig.watch(watch)
        seconds = self.observer.stopped_after(at)
        if seconds is None:
            return Measured(math.inf, False, 'it still moves')
        return Measured(seconds, self.sound(), self.observer.reason)

    def sound(self) -> bool:
        """Return whether every command so far was finite and inside the caps."""
        return all(math.isfinite(sum(command.vector))
                   and math.hypot(*command.vector[:3]) <= LINEAR * (1 + 1e-9)
                   and math.hypot(*command.vector[3:]) <= ANGULAR * (1 + 1e-9)
                   for command in self.observer.commands)

    def steady(self, seconds: float, *, during: Callable[[], None] | None = None,
               quantile: float = 1.0) -> Measured:
        """Watch the moving loop for a while; the seconds are its largest gap, or a quantile."""
        at = time.monotonic_ns()
        if during is not None:
            during()
        self.rig.watch(max(0.0, seconds - (time.monotonic_ns() - at) / SECOND_NS))
        gaps = self.observer.gaps(at)
        if len(gaps) < 5:
            return Measured(math.inf, False, f'{len(gaps)} commands only')
        figure = float(np.quantile(gaps, quantile))
        return Measured(figure, self.sound(), f'{len(gaps)} periods, longest {gaps.max():.3f} s')


def rows_of(cloud: PointCloud2) -> np.ndarray:
    """Return the points of a cloud, writable, as one row of float32 each."""
    return np.frombuffer(bytearray(cloud.data), '<f4').reshape(cloud.width, -1)


def with_rows(cloud: PointCloud2, rows: np.ndarray) -> PointCloud2:
    """Return the cloud with other numbers."""
    changed = copy.copy(cloud)
    changed.data = rows.tobytes()
    return changed


def restamped(cloud: PointCloud2, seconds: float) -> PointCloud2:
    """Return the cloud with its stamp moved."""
    stamp = cloud.header.stamp
    moved = stamp.sec * SECOND_NS + stamp.nanosec + round(seconds * SECOND_NS)
    stamp.sec, stamp.nanosec = divmod(moved, SECOND_NS)
    return cloud


Row = typing.Callable[[Bench, int], Measured]
