# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults of what runs: processes killed, frozen, starved, ended, restarted; clocks set."""

from __future__ import annotations

import math
import signal
import subprocess
import sys
import time

from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from rclpy.duration import Duration
from rclpy.event_handler import SubscriptionEventCallbacks
from rclpy.qos import LivelinessPolicy, QoSProfile
from rosgraph_msgs.msg import Clock

from servo_nodes.ros.drill_bench import Bench, Measured
from servo_nodes.values import SECOND_NS, Stamp

# A foreign listener to everything heavy, which is then frozen.
FOREIGN = """
import rclpy
from geometry_msgs.msg import TwistStamped
from sensor_msgs.msg import Image
rclpy.init()
node = rclpy.create_node('foreign')
for kind, name in ((Image, '/servo/image'), (Image, '/servo/tracker/overlay'),
                   (TwistStamped, '/servo/camera_twist')):
    node.create_subscription(kind, name, lambda message: None, rclpy.qos.qos_profile_sensor_data)
rclpy.spin(node)
"""


def tracker_dies(bench: Bench, run: int) -> Measured:
    """Kill or freeze the tracker."""
    bench.trial.nodes['tracker'].send(signal.SIGSTOP if run % 2 else signal.SIGKILL)
    bench.rig.spin(0.0)
    return bench.stopped(bench.relay.last_good, ('features_silent',))


def camera_stops(bench: Bench, run: int) -> Measured:
    """Freeze the simulator: no image, no arm."""
    bench.trial.nodes['simulator'].send(signal.SIGSTOP)
    bench.rig.watch(0.05)
    return bench.stopped(bench.relay.last_good, ('features_silent', 'image_silent'))


def system_clock(bench: Bench, run: int) -> Measured:
    """Set the system clock of all three nodes by 3 s or a day, forward or back."""
    step = (3, -3, 86400, -86400)[run % 4]

    def jump() -> None:
        bench.offset.write_text(f'{step:+d}\n')
    measured = bench.steady(2.5, during=jump)
    bench.offset.write_text('+0\n')
    return measured


def paused_time(bench: Bench, run: int) -> Measured:
    """Stop /clock, with the camera; when both go on, so does the loop."""
    simulator = bench.trial.nodes['simulator']
    simulator.send(signal.SIGSTOP)
    bench.rig.watch(0.05)
    measured = bench.stopped(bench.relay.last_good, ('features_silent', 'image_silent'))
    simulator.send(signal.SIGCONT)
    try:
        bench.rig.until(lambda: bench.observer.state in ('servoing', 'settled'), 5.0)
    except TimeoutError:
        return Measured(measured.seconds, False, f'did not resume: {bench.observer.reason}')
    return measured


def time_jumps_back(bench: Bench, run: int) -> Measured:
    """Say an earlier time on /clock once, as a looped bag does."""
    publisher = bench.rig.node.create_publisher(Clock, '/clock', 1)
    bench.rig.until(lambda: publisher.get_subscription_count() >= 2, 5.0, what='two followers')
    message = Clock()
    message.clock.nanosec = 500_000_000
    at = time.monotonic_ns()
    publisher.publish(message)
    measured = bench.stopped(at, ('clock_jump',))
    bench.rig.node.destroy_publisher(publisher)
    return measured


def exception(bench: Bench, run: int) -> Measured:
    """Let a callback of the controller raise."""
    controller = bench.trial.nodes['controller']
    at = time.monotonic_ns()
    bench.flag.touch()
    bench.rig.until(lambda: not controller.runs, 5.0, what='the end')
    bench.rig.watch(0.2)
    said = controller.said().count('injected by the drill')
    seconds = bench.observer.stopped_after(at)
    code = controller.wait(1.0)
    return Measured(math.inf if seconds is None else seconds,
                    code == 1 and said == 1 and bench.sound(), f'exit code {code}')


def hogs(bench: Bench, run: int) -> Measured:
    """Start two processes that do nothing but compute."""
    busy = [subprocess.Popen([sys.executable, '-c', 'while True: pass']) for _ in range(2)]
    try:
        return bench.steady(2.0, quantile=0.99)
    finally:
        for process in busy:
            process.kill()
            process.wait()


def asked_to_end(bench: Bench, run: int) -> Measured:
    """Send SIGINT or SIGTERM to the controller."""
    controller = bench.trial.nodes['controller']
    at = time.monotonic_ns()
    controller.send(signal.SIGTERM if run % 2 else signal.SIGINT)
    bench.rig.until(lambda: not controller.runs, 5.0, what='the end')
    took = (time.monotonic_ns() - at) / SECOND_NS
    bench.rig.watch(0.1)
    last = bench.observer.commands[-3:]
    seconds = bench.observer.stopped_after(at)
    right = controller.wait(1.0) == 0 and took <= 1.0 and all(one.is_zero for one in last)
    return Measured(math.inf if seconds is None else seconds, right and bench.sound(),
                    f'ended after {took:.2f} s')


def killed(bench: Bench, run: int) -> Measured:
    """Kill or freeze the controller: a driver that asks for the lease is told."""
    from geometry_msgs.msg import TwistStamped
    told: list[Stamp] = []
    profile = QoSProfile(depth=1, liveliness=LivelinessPolicy.AUTOMATIC,
                         liveliness_lease_duration=Duration(nanoseconds=300_000_000),
                         deadline=Duration(nanoseconds=100_000_000))
    driver = bench.rig.node.create_subscription(
        TwistStamped, 'camera_twist', lambda message: None, profile,
        event_callbacks=SubscriptionEventCallbacks(
            deadline=lambda event: told.append(time.monotonic_ns())))
    bench.rig.watch(0.5)
    told.clear()
    controller = bench.trial.nodes['controller']
    controller.send(signal.SIGSTOP if run % 2 else signal.SIGKILL)
    at = time.monotonic_ns()
    try:
        bench.rig.until(lambda: told, 2.0)
        return Measured((told[0] - at) / SECOND_NS, bench.sound(), 'deadline missed')
    except TimeoutError:
        return Measured(math.inf, False, 'no event')
    finally:
        bench.rig.node.destroy_subscription(driver)


def frozen_listener(bench: Bench, run: int) -> Measured:
    """Freeze a foreign process that listens to images, overlay and command."""
    child = bench.rig.start('foreign', code=FOREIGN)
    try:
        bench.rig.watch(1.5)
        child.send(signal.SIGSTOP)
        return bench.steady(2.0)
    finally:
        child.end(signal.SIGKILL)
        bench.rig.children.remove(child)


def paused_controller(bench: Bench, run: int) -> Measured:
    """Freeze the controller for a second: what it says first when it wakes is zero."""
    controller = bench.trial.nodes['controller']
    controller.send(signal.SIGSTOP)
    bench.rig.watch(1.0)
    at = time.monotonic_ns()
    controller.send(signal.SIGCONT)
    bench.rig.watch(0.5)
    first = [command for command in bench.observer.commands if command.at >= at][:1]
    right = bool(first) and first[0].is_zero
    return Measured(0.0 if right else math.inf, right and bench.sound(), bench.observer.state)


def deactivated(bench: Bench, run: int) -> Measured:
    """Deactivate the node while it moves."""
    at = time.monotonic_ns()
    answer = bench.rig.call(ChangeState, 'controller/change_state', ChangeState.Request(
        transition=Transition(id=Transition.TRANSITION_DEACTIVATE)))
    done = time.monotonic_ns()
    bench.rig.watch(0.2)
    late = [command for command in bench.observer.commands if command.at > done]
    seconds = bench.observer.stopped_after(at)
    bench.rig.call(ChangeState, 'controller/change_state', ChangeState.Request(
        transition=Transition(id=Transition.TRANSITION_ACTIVATE)))
    return Measured(math.inf if seconds is None else seconds,
                    answer.success and len(late) <= 1 and bench.sound(), f'{len(late)} late')


def any_order(bench: Bench, run: int) -> Measured:
    """End all three, start them in a random order: no stray command, then engaging works."""
    for child in bench.trial.nodes.values():
        child.end(signal.SIGKILL if run % 2 else signal.SIGINT)
    bench.rig.watch(0.3)
    at, count = time.monotonic_ns(), bench.relay.count
    for index in bench.rng.permutation(3):
        bench.trial.start(('simulator', 'tracker', 'controller')[index])
    bench.rig.until(lambda: bench.relay.count > count, 20.0, what='features')
    bench.rig.until(lambda: bench.observer.states[-1][0] > at
                    and bench.observer.state == 'standby', 20.0, what='standby')
    stray = [one for one in bench.observer.commands if one.at > at and not one.is_zero]
    there = time.monotonic_ns()
    bench.trial.engage(5.0)
    return Measured((time.monotonic_ns() - there) / SECOND_NS, not stray and bench.sound(),
                    f'{len(stray)} stray commands')

