# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The tracker as a node: images in, views out; it teaches and loads goals."""

from __future__ import annotations

import sys
import time
import typing
from collections.abc import Callable, Mapping

import numpy as np
from sensor_msgs.msg import CameraInfo, CompressedImage, PointCloud2, PointField
from sensor_msgs.msg import Image as ImageMessage
from std_srvs.srv import Trigger

from servo_nodes import wire
from servo_nodes.ros.artist import Artist
from servo_nodes.ros.diagnostics import ERROR, OK
from servo_nodes.ros.intake import image_from_compressed
from servo_nodes.ros.names import camera_info_name, compressed_name
from servo_nodes.ros.options import TrackerNodeSettings
from servo_nodes.ros.process import run
from servo_nodes.ros.shell import Shell
from servo_nodes.ros.teacher import aimed, taught
from servo_nodes.ros.watch import Watch
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from servo_nodes.values import SECOND_NS, Answer, Calibration, Image

DEPTH_APART_NS = 50_000_000


class TrackerNode(Shell):
    """Shows images to the tracker and publishes what it sees."""

    def __init__(self) -> None:
        super().__init__('tracker', TrackerSettings, TrackerNodeSettings)
        self._image: Image | None = None
        self._depth: Image | None = None
        self._received = 0
        self._calibration: Calibration | None = None

    def configure(self) -> str:
        """Make the core and its doors, and aim at the goal that is there."""
        shell, settings = self.parameters[TrackerNodeSettings], self.parameters[TrackerSettings]
        self.tracker = Tracker(settings, np.random.default_rng(shell.seed))
        doors = self.doors
        self._features = doors.publish(PointCloud2, 'features')
        self._artist, self.watch = Artist(self, shell.overlay.rate), Watch(self)
        if shell.image_transport == 'raw':
            doors.listen(ImageMessage, 'image', self._taker(
                'image', wire.image_from_message, self._take_image))
        else:
            doors.listen(CompressedImage, 'image/compressed', self._taker(
                'image/compressed', image_from_compressed, self._take_image),
                compressed_name(self))
        doors.listen(CameraInfo, 'camera_info', self._take_info, camera_info_name(self))
        doors.listen(ImageMessage, 'depth', self._taker(
            'depth', wire.image_from_message, self._take_depth))
        doors.serve(Trigger, '~/teach', self._teach)
        self._say(aimed(self.tracker, settings.goal.folder))
        return ''

    def activate(self) -> str:
        """Start looking."""
        self.watch.begin()
        return ''

    def deactivate(self) -> str:
        """Stop looking."""
        self.watch.end()
        return ''

    def cleanup(self) -> None:
        """Stop drawing and forget what was seen."""
        self._artist.close()
        self._image = self._depth = self._calibration = None

    def adopt(self, settings: Mapping[type, object]) -> str:
        """Swap the tracker's settings; another goal folder is read at once, or refused."""
        new = typing.cast('TrackerSettings | None', settings.get(TrackerSettings))
        if not self.configured or new is None:
            return ''
        if new.goal.folder != self.parameters[TrackerSettings].goal.folder:
            answer = self._say(aimed(self.tracker, new.goal.folder))
            if not answer.ok:
                return answer.text
        answer = self.tracker.adopt(new)
        return '' if answer.ok else answer.text

    def _taker(self, name: str, read: Callable[[typing.Any], Image],
               take: Callable[[Image], None]) -> Callable[[typing.Any], None]:
        """Return the callback that reads a message, or drops and counts it, and hands it on."""
        def callback(message: typing.Any) -> None:
            if not self.active:
                return
            try:
                image = read(message)
            except ValueError as error:
                self.watch.drop(name, str(error))
                return
            take(image)
        return callback

    def _take_image(self, image: Image) -> None:
        start = time.monotonic_ns()
        self._image, self._received = image, start
        view = self.tracker.look(image, self._depth_of(image))
        message = PointCloud2()
        wire.fill_cloud(message, view, PointField)
        self._features.publish(message)
        self.watch.take(image.stamp, start, self.tracker.status)
        self._artist.offer(image, self.tracker.status)

    def _take_depth(self, depth: Image) -> None:
        self._depth = depth

    def _depth_of(self, image: Image) -> Image | None:
        depth = self._depth
        if depth is None or abs(depth.stamp - image.stamp) > DEPTH_APART_NS:
            return None
        return depth

    def _take_info(self, message: CameraInfo) -> None:
        calibration = wire.calibration_from_message(message)
        if calibration != self._calibration:
            self._calibration = calibration
            self._say(self.tracker.calibrate(calibration))

    def _teach(self, request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        silence = (time.monotonic_ns() - self._received) / SECOND_NS
        if self._image is None or not (self.active and silence <= 1.0):
            answer = Answer(False, 'teach: expected an image within the last second, got none; '
                            'start the camera')
        else:
            answer = taught(self.tracker, self._image, self._depth_of(self._image),
                            self.parameters[TrackerSettings].goal.folder)
        response.success, response.message = self._say(answer).ok, answer.text
        return response

    def _say(self, answer: Answer) -> Answer:
        self.tell(OK if answer.ok else ERROR, answer.text)
        return answer


def main() -> None:
    """Run the node."""
    sys.exit(run(TrackerNode))
