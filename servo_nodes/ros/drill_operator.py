# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults of who operates: parameters, stops, second commanders, missing listeners, returns."""

from __future__ import annotations

import math
import signal
import time

import numpy as np
from geometry_msgs.msg import TwistStamped
from std_msgs.msg import Bool

from servo_nodes.ros.drill_bench import ANGULAR, LINEAR, PERIOD_S, Bench, Measured
from servo_nodes.values import SECOND_NS

BAD = ({'caps__linear': 9.0}, {'law__gain': math.nan}, {'caps__axes': (1.0,)},
       {'watchdog__timeout': 0.0}, {'law__gain': 1.0, 'caps__angular': -1.0})
LINEAR_ACCELERATION = 0.5


def bad_parameters(bench: Bench, run: int) -> Measured:
    """Ask for forbidden values, again and again, while it moves."""
    taken: list[object] = []

    def storm() -> None:
        for _ in range(5):
            taken.extend(one for one in BAD if not bench.rig.set('controller', **one))
    measured = bench.steady(1.0, during=storm)
    return Measured(measured.seconds, measured.ok and not taken, f'{len(taken)} taken')


def above_caps(bench: Bench, run: int) -> Measured:
    """Raise the gain forty times: direction kept, speeds and accelerations capped."""
    since = len(bench.observer.commands)
    bench.rig.set('controller', law__gain=20.0)
    bench.rig.watch(0.5)
    bench.rig.set('controller', law__gain=0.5)
    commands = bench.observer.commands[since:]
    steps = [math.dist(one.vector[:3], other.vector[:3])
             for one, other in zip(commands, commands[1:], strict=False)]
    scaled = any(float(values.get('ratio', 1.0)) < 1.0 for _, _, values in bench.observer.states)
    # The period is measured by the controller and clamped to two; so is a step.
    capped = max(steps, default=0.0) <= 2.0 * LINEAR_ACCELERATION * PERIOD_S * (1 + 1e-6)
    return Measured(0.0, bench.sound() and scaled and capped,
                    f'largest step {max(steps, default=0.0):.4f} m/s')


def operator_stop(bench: Bench, run: int) -> Measured:
    """Say halt; it latches until a reset."""
    publisher = bench.rig.node.create_publisher(Bool, 'controller/halt', 1)
    bench.rig.until(lambda: publisher.get_subscription_count() > 0, 5.0, what='the halt input')
    at = time.monotonic_ns()
    publisher.publish(Bool(data=True))
    measured = bench.stopped(at, ('halted',))
    latched = not bench.observer.engage().success
    publisher.publish(Bool(data=False))
    bench.rig.until(lambda: bench.observer.reset().success, 5.0, what='a reset')
    bench.rig.node.destroy_publisher(publisher)
    return Measured(measured.seconds, measured.ok and latched, measured.note)


def second_publisher(bench: Bench, run: int) -> Measured:
    """Let somebody else publish the command."""
    at = time.monotonic_ns()
    publisher = bench.rig.node.create_publisher(TwistStamped, 'camera_twist', 1)
    try:
        return bench.stopped(at, ('second_publisher',))
    finally:
        bench.rig.node.destroy_publisher(publisher)
        bench.rig.watch(0.3)


def no_listener(bench: Bench, run: int) -> Measured:
    """Take every listener of the command away; measured by the state, for nobody hears zeros."""
    bench.observer.listen(False)
    at = time.monotonic_ns()
    bench.trial.nodes['simulator'].end(signal.SIGINT)
    try:
        bench.rig.until(lambda: 'no_listener' in bench.observer.reasons_since(at), 5.0)
        seconds = (time.monotonic_ns() - at) / SECOND_NS
    except TimeoutError:
        seconds = math.inf
    bench.observer.listen(True)
    return Measured(seconds, bench.observer.state == 'faulted', bench.observer.reason)


def returning(bench: Bench, run: int) -> Measured:
    """Hold, then show good views again: motion returns after three of them, from rest."""
    bench.relay.change = lambda cloud: None
    bench.stopped(bench.relay.last_good, ('features_silent',))
    since, count = len(bench.observer.commands), bench.relay.count
    bench.relay.change = None
    try:
        bench.rig.until(lambda: bench.observer.moves, 5.0, what='motion')
    except TimeoutError as error:
        return Measured(math.inf, False, str(error))
    good = bench.relay.count - count
    bench.rig.watch(0.3)
    moving = [one for one in bench.observer.commands[since:] if not one.is_zero]
    first = math.hypot(*moving[0].vector[:3])
    ramped = first <= 2.0 * LINEAR_ACCELERATION * PERIOD_S * (1 + 1e-6)
    speeds = [np.linalg.norm(one.vector[:3]) for one in moving]
    return Measured(0.0, good >= 3 and ramped and max(speeds) <= LINEAR and bench.sound(),
                    f'{good} views, first {first:.4f} m/s, cap {ANGULAR} rad/s')
