# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Draws the tracker's overlay in a thread of its own, and only when somebody watches."""

from __future__ import annotations

import array
import threading
import time
import typing

import cv2
import numpy as np
from sensor_msgs.msg import CompressedImage
from sensor_msgs.msg import Image as ImageMessage

from servo_nodes import wire
from servo_nodes.report import overlay
from servo_nodes.tracking.pictures import grey_from_image
from servo_nodes.tracking.tracker import Status
from servo_nodes.values import SECOND_NS, Image


class Artist:
    """Keeps the newest image and its findings; draws and publishes at most `rate` times a second.

    Parameters
    ----------
    node : TrackerNode
    rate : float, Hz
    """

    def __init__(self, node: typing.Any, rate: float) -> None:
        self._node = node
        self._period_ns = round(SECOND_NS / rate)
        self._raw = node.doors.publish(ImageMessage, '~/overlay')
        self._compressed = node.doors.publish(CompressedImage, '~/overlay/compressed')
        self._slot: tuple[Image, Status] | None = None
        self._ready = threading.Condition()
        self._ended = False
        self._due = 0
        self.drawn = 0
        self._thread = threading.Thread(target=self._run, name='overlay', daemon=True)
        self._thread.start()

    def offer(self, image: Image, status: Status) -> None:
        """Take an image and what was found in it, if anybody watches and it is time."""
        now = time.monotonic_ns()
        if now < self._due or not (self._watched(self._raw) or self._watched(self._compressed)):
            return
        self._due = now + self._period_ns
        with self._ready:
            self._slot = image, status
            self._ready.notify()

    def close(self) -> None:
        """Stop drawing."""
        with self._ready:
            self._ended = True
            self._ready.notify()
        self._thread.join(0.5)

    @staticmethod
    def _watched(publisher: typing.Any) -> bool:
        return publisher.get_subscription_count() > 0

    def _run(self) -> None:
        try:
            while True:
                with self._ready:
                    self._ready.wait_for(lambda: self._ended or self._slot is not None)
                    if self._ended or self._slot is None:
                        return
                    (image, status), self._slot = self._slot, None
                self._draw(image, status)
        except Exception as error:
            self._node.fail(error)

    def _draw(self, image: Image, status: Status) -> None:
        try:
            picture = overlay.overlay(
                _shown(image), points_px=status.points_px, goal_px=status.goal_px,
                homography=status.homography, text=status.reason,
                points=(status.inliers, status.points))
        except ValueError as error:
            self._node.warn_seldom('overlay', f'overlay: {error}')
            return
        self.drawn += 1
        if self._watched(self._raw):
            message = ImageMessage()
            wire.fill_image(message, Image(picture, 'bgr8', image.stamp, image.frame_id))
            self._raw.publish(message)
        if self._watched(self._compressed):
            self._publish_compressed(picture, image)

    def _publish_compressed(self, picture: np.ndarray, image: Image) -> None:
        message = CompressedImage(format='bgr8; jpeg compressed bgr8')
        wire.fill_time(message.header.stamp, image.stamp)
        message.header.frame_id = image.frame_id
        data = array.array('B')
        data.frombytes(overlay.encoded(picture))
        message.data = data
        self._compressed.publish(message)


def _shown(image: Image) -> np.ndarray:
    """Return the image as the overlay takes it: bgr or grey, 8 bit."""
    if image.encoding in ('bgr8', 'mono8'):
        return np.ascontiguousarray(image.array)
    if image.encoding == 'rgb8':
        return cv2.cvtColor(np.ascontiguousarray(image.array), cv2.COLOR_RGB2BGR)
    return grey_from_image(image)
