# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Publishes the simulator's pictures: image, calibration, depth and the true pose, one stamp."""

from __future__ import annotations

import typing

from geometry_msgs.msg import PoseStamped
from sensor_msgs.msg import CameraInfo
from sensor_msgs.msg import Image as ImageMessage

from servo_nodes import motion, wire
from servo_nodes.ros.options import SimulatorNodeSettings
from servo_nodes.simulation.simulator import Picture
from servo_nodes.values import Image, Stamp


class Pictures:
    """The simulated camera's outputs.

    Parameters
    ----------
    node : SimulatorNode
    """

    def __init__(self, node: typing.Any) -> None:
        self._node = node
        self._image = node.doors.publish(ImageMessage, 'image')
        self._info = node.doors.publish(CameraInfo, 'camera_info')
        self._depth = node.doors.publish(ImageMessage, 'depth')
        self._pose = node.doors.publish(PoseStamped, 'true_pose')

    def show(self, picture: Picture, stamp: Stamp) -> None:
        """Publish a picture under a stamp, ns; depth only when asked for and listened to."""
        options, frame = self._node.parameters[SimulatorNodeSettings], picture.calibration.frame_id
        info = CameraInfo()
        wire.fill_camera_info(info, picture.calibration, stamp)
        self._info.publish(info)
        self._image.publish(_message(Image(picture.image, picture.encoding, stamp, frame)))
        if options.publish_depth and self._depth.get_subscription_count():
            self._depth.publish(_message(Image(picture.depth, '32FC1', stamp, frame)))
        pose = PoseStamped()
        wire.fill_time(pose.header.stamp, stamp)
        pose.header.frame_id = options.target_frame
        wire.fill_pose(pose.pose, picture.pose[:3, 3],
                       motion.quaternion_from_rotation(picture.pose[:3, :3]))
        self._pose.publish(pose)


def _message(image: Image) -> ImageMessage:
    message = ImageMessage()
    wire.fill_image(message, image)
    return message
