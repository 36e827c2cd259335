# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The faulty line between a source and the loop, in a process of its own."""

from __future__ import annotations

import numpy as np
import pytest
from sensor_msgs.msg import PointCloud2, PointField

from servo_nodes import wire
from servo_nodes.values import View

pytestmark = pytest.mark.processes


def view(stamp):
    """Return three points under a stamp."""
    xy = np.array([[0.1, 0.2], [0.3, 0.1], [-0.2, 0.0]])
    return View(stamp, 'camera', xy, xy, np.ones(3), np.ones(3), np.ones(3), np.arange(3))


def test_faults_are_switched_on_and_off_while_messages_pass(rig):
    """Unchanged at first; then with NaN and a stamp from the future; then none at all."""
    rig.start('proxy')
    source = rig.node.create_publisher(PointCloud2, 'input', 1)
    got = []
    rig.node.create_subscription(PointCloud2, 'output', got.append, 10)
    stamps = iter(range(10 ** 18, 10 ** 18 + 10 ** 13, 10 ** 9))

    def passed():
        got.clear()
        message = PointCloud2()
        stamp = next(stamps)
        wire.fill_cloud(message, view(stamp), PointField)
        source.publish(message)
        rig.watch(0.1)
        return [(wire.view_from_cloud(one), stamp) for one in got]

    seen, stamp = rig.until(passed, 20.0, what='a message')[-1]
    assert seen.stamp == stamp and np.allclose(seen.points_xy, view(0).points_xy)
    assert rig.set('proxy', faults__nan=1.0, faults__stamp_offset=2.0) == []
    seen, stamp = rig.until(passed, what='a message')[-1]
    assert seen.stamp == stamp + 2 * 10 ** 9 and np.isnan(seen.points_xy).any()
    assert rig.set('proxy', faults__drop=1.0) == []
    assert not passed() and not passed()
