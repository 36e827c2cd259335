# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Intake: judges every view as it comes, drops and counts what may not move the camera."""

from __future__ import annotations

import collections
import dataclasses
import math
from collections.abc import Iterator, Sequence

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.control.settings import WatchdogSettings
from servo_nodes.values import SECOND_NS, Floats, Reason, Stamp, View

FARTHEST_XY = 100.0
DEPTHS = (1e-3, 1e4)
LEAST_MOTION = 1e-3

INBOX = 64

Fault = tuple[Reason, str]


def age(then: Stamp | None, now: Stamp | None) -> float:
    """Return the seconds from `then` to `now`; infinite when there was no then, or no now."""
    return math.inf if then is None or now is None else (now - then) / SECOND_NS


class Intake:
    """What came in, when, and what it was worth.

    Attributes
    ----------
    told : int or None, ns, the newest time that came with a view, judged or not
    heard, good, image : int or None, ns: receipt of the newest message, receipt of the newest good
        one, stamp of its image
    bad, bad_text, bad_in_a_row : why the newest message was dropped, and how many since a good one
    good_in_a_row : int
    crowded : float, share of the points along the image border or beyond it
    counts : how many messages were dropped (stamp_zero: restamped) for each reason
    """

    def __init__(self, settings: WatchdogSettings) -> None:
        self.settings = settings
        self.camera: Camera | None = None
        self.counts: dict[Reason, int] = {}
        self.dropped = 0
        self._inbox: collections.deque[tuple[View | Fault, Stamp | None]] = collections.deque(
            maxlen=INBOX)
        self.forget()

    def forget(self) -> None:
        """Forget every view, so that a new time line is accepted; the counts stay."""
        self._inbox.clear()
        self.told: Stamp | None = None
        self.heard: Stamp | None = None
        self.good: Stamp | None = None
        self.image: Stamp | None = None
        self.bad, self.bad_text, self.bad_in_a_row = Reason.NONE, '', 0
        self.good_in_a_row = 0
        self.crowded = 0.0
        self._points: Floats = np.empty((0, 2))
        self._changed: Stamp = 0
        self._moved = 0.0

    def post(self, view: View, received: Stamp | None) -> None:
        """Store a view for `judged`; nothing is looked at yet, so that any thread may call."""
        told = self.told
        if received is not None:
            self.told = received if told is None else max(received, told)
        elif told is None:
            self.told = view.stamp
        self._inbox.append((view, received))

    def post_fault(self, reason: Reason, text: str) -> None:
        """Store that a message had to be dropped before it became a view."""
        self._inbox.append(((reason, text), None))

    def judged(self, now: Stamp) -> Iterator[View]:
        """Judge what was stored, in order of arrival; yield the good views."""
        while self._inbox:
            item, received = self._inbox.popleft()
            received = now if received is None else min(received, now)
            if not isinstance(item, View):
                self.drop(*item, received)
                continue
            good = self.judge(item, received)
            if good is not None:
                yield good

    def moved(self, twist: Sequence[float], duration: float) -> None:
        """Note that `twist` (6 numbers) was sent for `duration` s: the points must move, too."""
        self._moved += duration * max(max(twist), -min(twist))

    def drop(self, reason: Reason, text: str, received: Stamp) -> None:
        """Count a message that may not move the camera; it was at least heard."""
        self.heard = received
        self.bad, self.bad_text = reason, text
        self.bad_in_a_row += 1
        self.good_in_a_row = 0
        self.dropped += 1
        self.counts[reason] = self.counts.get(reason, 0) + 1

    def judge(self, view: View, received: Stamp) -> View | None:
        """Return the view, its stamp never later than its receipt, or None when it is dropped."""
        stamp = view.stamp
        if stamp == 0 and self.settings.zero_stamp == 'receive':
            self.counts[Reason.STAMP_ZERO] = self.counts.get(Reason.STAMP_ZERO, 0) + 1
            stamp = received
        fault = (self._fault_of_stamp(stamp, received) or self._fault_of_frame(view)
                 or self._fault_of_points(view) or self._fault_of_change(view, received))
        if fault is not None:
            self.drop(*fault, received)
            return None
        self.heard = self.good = received
        self.image = stamp = min(stamp, received)
        self.bad, self.bad_text, self.bad_in_a_row = Reason.NONE, '', 0
        self.good_in_a_row += 1
        self.crowded = self._crowd(view.points_xy)
        return view if stamp == view.stamp else dataclasses.replace(view, stamp=stamp)

    def _fault_of_stamp(self, stamp: Stamp, received: Stamp) -> Fault | None:
        behind = age(stamp, received)
        if stamp == 0:
            return Reason.STAMP_ZERO, 'features: expected a stamp, got zero'
        if behind < -self.settings.future_tolerance:
            return Reason.STAMP_FUTURE, (
                f'features: expected a stamp at most {self.settings.future_tolerance:g} s ahead '
                f'of the clock, got {-behind:.3f} s')
        newest, stamp = self.image, min(stamp, received)
        if stamp == newest:
            return Reason.IMAGE_SILENT, (
                f'features: expected a new image within {self.settings.timeout:g} s, got the same '
                'one again')
        if not behind <= self.settings.staleness:
            return Reason.FEATURES_STALE, (
                f'features: expected an image at most {self.settings.staleness:g} s old, got '
                f'{behind:.3f} s')
        if newest is not None and stamp < newest:
            return Reason.STAMP_BACKWARD, (
                'features: expected a stamp after the last one, got one '
                f'{age(stamp, newest):.3f} s before it')
        return None

    def _fault_of_frame(self, view: View) -> Fault | None:
        if self.camera is None or view.frame_id == self.camera.frame_id:
            return None
        return Reason.CAMERA_MISMATCH, (
            f'features: expected the frame {self.camera.frame_id!r} of camera_info, got '
            f'{view.frame_id!r}')

    def _fault_of_points(self, view: View) -> Fault | None:
        """Judge the numbers; an angle of 89.4 degrees off the axis is not seen by any lens."""
        if len(view) and np.isnan(view.goal_xy).all():
            return Reason.NO_GOAL, f'features: expected goal coordinates, got {len(view)} without'
        lo, hi = DEPTHS
        depths = np.concatenate((view.depths, view.goal_depths))
        if not ((np.abs(view.points_xy) <= FARTHEST_XY).all()
                and (np.abs(view.goal_xy) <= FARTHEST_XY).all()
                and ((view.weights >= 0.0) & (view.weights <= 1.0)).all()
                and (np.isnan(depths) | ((depths >= lo) & (depths <= hi))).all()):
            return Reason.NOT_FINITE, (
                f'features: expected coordinates within +-{FARTHEST_XY:g}, weights from 0 to 1, '
                f'depths from {lo:g} to {hi:g} m or NaN, got others')
        count = int(np.count_nonzero(view.weights))
        if not count >= self.settings.least_points:
            return Reason.TOO_FEW_POINTS, (
                f'features: expected at least {self.settings.least_points} points, got {count}')
        return None

    def _fault_of_change(self, view: View, received: Stamp) -> Fault | None:
        """Notice a frozen picture under new stamps: the camera is moved, the points do not."""
        if not np.array_equal(self._points, view.points_xy):
            self._points, self._changed, self._moved = view.points_xy, received, 0.0
            return None
        same = age(self._changed, received)
        if same <= self.settings.frozen or self._moved <= LEAST_MOTION:
            return None
        return Reason.IMAGE_SILENT, (
            'features: expected points that move with the camera within '
            f'{self.settings.frozen:g} s, got the same ones for {same:.3f} s')

    def _crowd(self, points_xy: Floats) -> float:
        """Return the share of points in the band along the image border, or beyond it."""
        camera = self.camera
        if camera is None:
            return 0.0
        uv = camera.pixels_from_normalised(points_xy)
        band = self.settings.border * min(camera.width, camera.height)
        inside = (uv >= band) & (uv <= (camera.width - 1.0 - band, camera.height - 1.0 - band))
        return 1.0 - float(np.count_nonzero(inside.all(-1))) / len(points_xy)
