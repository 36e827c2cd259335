# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Messages for the tests: the real ones, and look-alikes with the same attributes."""

from __future__ import annotations

import types

import pytest


def look_alikes() -> types.SimpleNamespace:
    """Return makers of objects shaped like the messages."""
    space = types.SimpleNamespace

    def header():
        return space(stamp=space(sec=0, nanosec=0), frame_id='')

    def vector():
        return space(x=0.0, y=0.0, z=0.0)
    return space(
        Time=lambda: space(sec=0, nanosec=0),
        Image=lambda: space(header=header(), height=0, width=0, encoding='', is_bigendian=0,
                            step=0, data=b''),
        CameraInfo=lambda: space(
            header=header(), height=0, width=0, distortion_model='', d=[], k=[0.0] * 9,
            r=[0.0] * 9, p=[0.0] * 12, binning_x=0, binning_y=0,
            roi=space(x_offset=0, y_offset=0, height=0, width=0, do_rectify=False)),
        PointCloud2=lambda: space(header=header(), height=0, width=0, fields=[],
                                  is_bigendian=False, point_step=0, row_step=0, data=b'',
                                  is_dense=False),
        PointField=space,
        TwistStamped=lambda: space(header=header(),
                                   twist=space(linear=vector(), angular=vector())),
        Pose=lambda: space(position=vector(), orientation=space(x=0.0, y=0.0, z=0.0, w=1.0)),
        DiagnosticStatus=lambda: space(level=b'\0', name='', message='', hardware_id='',
                                       values=[]),
        KeyValue=space)


def real() -> types.SimpleNamespace:
    """Return the classes of the real messages, or skip."""
    pytest.importorskip('rclpy', reason='no ROS 2 here: the look-alikes stand in')
    from builtin_interfaces.msg import Time
    from diagnostic_msgs.msg import DiagnosticStatus, KeyValue
    from geometry_msgs.msg import Pose, TwistStamped
    from sensor_msgs.msg import CameraInfo, Image, PointCloud2, PointField
    return types.SimpleNamespace(**{cls.__name__: cls for cls in (
        Time, DiagnosticStatus, KeyValue, Pose, TwistStamped, CameraInfo, Image, PointCloud2,
        PointField)})
