# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the tracker says beside its views: images lost or malformed, the goal found or not."""

from __future__ import annotations

import time
import typing

from servo_nodes.ros.diagnostics import ERROR, OK, WARN, Diagnostics, parameter_hash, versions
from servo_nodes.ros.limiter import Limiter
from servo_nodes.ros.meters import Arrivals, Durations
from servo_nodes.tracking.tracker import Status
from servo_nodes.values import SECOND_NS, Stamp

SILENCE_S = 0.2
MOST_LOSS = 0.10
REMEDY = ('if the camera driver uses Fast DDS, start it with the larger shared-memory segment of '
          'config/dds_profile.xml (FASTDDS_DEFAULT_PROFILES_FILE and '
          'FASTRTPS_DEFAULT_PROFILES_FILE), or set '
          'qos_overrides.<image topic>.subscription.reliability to reliable')


class Watch:
    """Counts, times and reports; looks ten times a second whether images still come.

    Parameters
    ----------
    node : TrackerNode
    """

    def __init__(self, node: typing.Any) -> None:
        self._node = node
        self._diagnostics = Diagnostics(node, 'images')
        self._images, self._work = Arrivals(), Durations('look')
        self._minute = Limiter(60.0)
        self._status = Status()
        self._dropped: dict[str, int] = {}
        self._said: bool | None = None
        self._due = 0
        self._timer: typing.Any = None

    def begin(self) -> None:
        """Start looking."""
        self._timer = self._node.every(0.1, self._look)

    def end(self) -> None:
        """Stop looking."""
        if self._timer is not None:
            self._node.destroy_timer(self._timer)
            self._timer = None

    def take(self, stamp: Stamp, start: Stamp, status: Status) -> None:
        """Take note of an image that was looked at since `start`, steady ns."""
        now = time.monotonic_ns()
        self._images.add(stamp, start, self._node.now_ns() - stamp)
        self._work.add(now - start)
        self._status = status
        if status.acquired != self._said:
            self._said = status.acquired
            words = self._node.limiter.passed(f'acquired {status.acquired}', status.reason)
            if words is not None:
                self._node.tell(OK if status.acquired else WARN, words)

    def drop(self, name: str, text: str) -> None:
        """Count a message that could not be read, and say so seldom."""
        self._dropped[name] = self._dropped.get(name, 0) + 1
        self._node.warn_seldom(name, f'{name} dropped: {text}')

    def _look(self) -> None:
        now = time.monotonic_ns()
        level, text = self._judged(now)
        whole = now >= self._due
        if whole:
            self._due = now + SECOND_NS
            self._warn_of_loss()
            clock_fault = self._node.clock_fault()
            if clock_fault:
                self._node.warn_seldom('clock', clock_fault)
        self._diagnostics.say(level, text, self._values(now), on_change_only=not whole)

    def _judged(self, now: Stamp) -> tuple[bytes, str]:
        silence = self._images.silence(now)
        if not silence <= SILENCE_S:
            if self._images.count:
                self._node.warn_seldom(
                    'silence', f'no image for {silence:.2f} s, expected one every {SILENCE_S} s; '
                    'check the camera and its driver')
            return ERROR, 'no image' if not self._images.count else f'no image for {silence:.1f} s'
        if not self._status.acquired:
            return WARN, self._status.reason
        if self._images.loss() > MOST_LOSS:
            return WARN, f'{100 * self._images.loss():.0f} % of the images are lost on the way'
        return OK, self._status.reason

    def _warn_of_loss(self) -> None:
        loss = self._images.loss()
        if loss <= MOST_LOSS:
            return
        said = self._minute.passed(
            'loss', f'{100 * loss:.0f} % of the images are lost between camera and tracker, at '
            f'most {100 * MOST_LOSS:.0f} % expected; {REMEDY}')
        if said is not None:
            self._node.get_logger().warning(said)

    def _values(self, now: Stamp) -> dict[str, object]:
        status = self._status
        return {
            'acquired': status.acquired, 'reason': status.reason, 'points': status.inliers,
            'goal_points': status.points, 'residual_px': float(status.residual_px),
            'depth_source': status.depth_source, **self._images.figures(now),
            **self._work.figures(),
            **{f'dropped_{name}': count for name, count in self._dropped.items()},
            'clock': 'simulated' if self._node.get_clock().ros_time_is_active else 'system',
            **versions(), 'parameters': parameter_hash(self._node.parameters.values())}
