# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults of what is said: lost targets, stamps, numbers, calibrations, images."""

from __future__ import annotations

import copy
import time

import numpy as np
from sensor_msgs.msg import CameraInfo, Image, PointCloud2

from servo_nodes import wire
from servo_nodes.ros.drill_bench import Bench, Change, Measured, restamped, rows_of, with_rows
from servo_nodes.values import Calibration
from servo_nodes.values import Image as Pixels


def _relayed(bench: Bench, change: Change, *reasons: str) -> Measured:
    bench.relay.change = change
    measured = bench.stopped(bench.relay.last_good, reasons)
    bench.relay.change = None
    return measured


def target_lost(bench: Bench, run: int) -> Measured:
    """Send empty clouds."""
    def emptied(cloud: PointCloud2) -> PointCloud2:
        cloud.width, cloud.row_step, cloud.data = 0, 0, b''
        return cloud
    return _relayed(bench, emptied, 'too_few_points')


def old_images(bench: Bench, run: int) -> Measured:
    """Send views whose image is 0.4 s older."""
    return _relayed(bench, lambda cloud: restamped(cloud, -0.4), 'features_stale',
                    'stamp_backward')


def frozen_picture(bench: Bench, run: int) -> Measured:
    """Let the camera repeat one picture under new stamps."""
    at = time.monotonic_ns()
    bench.rig.set('simulator', faults__freeze=True)
    measured = bench.stopped(at, ('too_few_points', 'image_silent'))
    bench.rig.set('simulator', faults__freeze=False)
    return measured


def repeated_stamps(bench: Bench, run: int) -> Measured:
    """Send every view under the stamp of one, or of earlier and earlier ones."""
    first: list[PointCloud2] = []

    def stuck(cloud: PointCloud2) -> PointCloud2:
        first.append(cloud)
        if len(first) == 1:
            bench.relay.last_good = time.monotonic_ns()
        cloud.header.stamp = copy.copy(first[0].header.stamp)
        return restamped(cloud, -0.01 * len(first)) if run % 2 else cloud
    bench.relay.change = stuck
    bench.rig.until(lambda: len(first) > 1, 2.0, what='features')
    measured = bench.stopped(bench.relay.last_good, (
        'image_silent', 'stamp_backward', 'features_stale'))
    bench.relay.change = None
    return measured


def zero_stamps(bench: Bench, run: int) -> Measured:
    """Send views that nobody stamped: the time of receipt serves, and the loop goes on."""
    def unstamped(cloud: PointCloud2) -> PointCloud2:
        cloud.header.stamp.sec = cloud.header.stamp.nanosec = 0
        return cloud
    bench.relay.change = unstamped
    bench.rig.watch(0.6)
    bench.relay.change = None
    return Measured(0.0, bench.sound() and bench.observer.moves, bench.observer.state)


def future_stamps(bench: Bench, run: int) -> Measured:
    """Send views from a second ahead, or with negative seconds."""
    def ahead(cloud: PointCloud2) -> PointCloud2:
        if run % 2:
            cloud.header.stamp.sec = -5
            return cloud
        return restamped(cloud, 1.0)
    return _relayed(bench, ahead, 'stamp_future', 'not_finite')


def not_finite(bench: Bench, run: int) -> Measured:
    """Send views with NaN or infinite coordinates."""
    def spoilt(cloud: PointCloud2) -> PointCloud2:
        rows = rows_of(cloud).copy()
        rows[:, 3 + run % 4] = np.nan if run % 2 else np.inf
        return with_rows(cloud, rows)
    return _relayed(bench, spoilt, 'not_finite')


def other_camera(bench: Bench, run: int) -> Measured:
    """Change the calibration in flight: another size, or none at all."""
    publisher = bench.rig.node.create_publisher(CameraInfo, 'camera_info', 1)
    bench.rig.until(lambda: publisher.get_subscription_count() >= 2, 5.0, what='two listeners')
    k = (0.,) * 9 if run % 2 else (300., 0., 159.5, 0., 300., 119.5, 0., 0., 1.)
    message = CameraInfo()
    wire.fill_camera_info(message, Calibration('camera_optical_frame', 320, 240, 'plumb_bob',
                                               (0.,) * 5, k),
                          bench.rig.node.get_clock().now().nanoseconds)
    at = time.monotonic_ns()
    # The camera's own calibration may overwrite ours in a queue of one.
    for _ in range(5):
        publisher.publish(message)
        bench.rig.watch(0.005)
    measured = bench.stopped(at, ('camera_mismatch', 'no_camera'))
    bench.rig.node.destroy_publisher(publisher)
    return measured


NEAR = {'start__translation': (0.03, 0.0, -0.03), 'start__rotation': (0.0, 0.0, 0.0)}
MALFORMED = ({'encoding': 'plasma8'}, {'width': 0, 'height': 0}, {'step': 3}, {'height': 4000})


def malformed_images(bench: Bench, run: int) -> Measured:
    """Mix broken images among good ones: they are dropped, and the loop goes on."""
    publisher = bench.rig.node.create_publisher(Image, 'image', 1)
    bench.rig.until(lambda: publisher.get_subscription_count() >= 1, 5.0, what='a tracker')
    for changes in MALFORMED:
        message = Image()
        wire.fill_image(message, Pixels(np.zeros((480, 640), np.uint8), 'mono8',
                                        bench.rig.node.get_clock().now().nanoseconds, 'camera'))
        for name, value in changes.items():
            setattr(message, name, value)
        publisher.publish(message)
        bench.rig.watch(0.05)
    bench.rig.node.destroy_publisher(publisher)
    # A broken image may take a good one's place in the queue of one, and cost a short hold.
    bench.rig.until(lambda: bench.observer.state == 'servoing' and bench.observer.moves, 2.0,
                    what='motion')
    return Measured(0.0, bench.trial.nodes['tracker'].runs and bench.sound(),
                    bench.observer.state)


def diverging(bench: Bench, run: int) -> Measured:
    """Mirror the error, so that every step makes it larger."""
    def mirrored(cloud: PointCloud2) -> PointCloud2:
        rows = rows_of(cloud).copy()
        rows[:, 3:5] = 2.0 * rows[:, 5:7] - rows[:, 3:5]
        return with_rows(cloud, rows)
    bench.trial.stop()
    bench.trial.go(NEAR)
    bench.relay.change = mirrored
    measured = bench.stopped(bench.relay.last_good, ('diverging',), timeout=8.0)
    bench.relay.change = None
    return measured
