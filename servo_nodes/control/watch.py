# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Intake: judges every view as it comes, drops and counts what may not move the camera."""

from __future__ import annotations

import math

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.control.settings import WatchdogSettings
from servo_nodes.values import SECOND_NS, Floats, Reason, Stamp, View

LEAST_MOTION = 1e-3


def age(then: Stamp | None, now: Stamp) -> float:
    """Return the seconds from `then` to `now`; infinite when there was no then."""
    return math.inf if then is None else (now - then) / SECOND_NS


class Intake:
    """What came in, when, and what it was worth."""

    def __init__(self, settings: WatchdogSettings) -> None:
        self.settings = settings
        self.camera: Camera | None = None
        self.counts: dict[Reason, int] = {}
        self.forget()

    def forget(self) -> None:
        """Forget every view, so that a new time line is accepted; the counts stay."""
        self.heard: Stamp | None = None
        self.good: Stamp | None = None
        self.image: Stamp | None = None
        self.bad, self.bad_text, self.bad_in_a_row = Reason.NONE, '', 0
        self.good_in_a_row = 0
        self.crowded = 0.0
        self._points: Floats | None = None
        self._changed: Stamp = 0
        self._moved_since = 0.0

    def moved(self, twist: Floats, duration: float) -> None:
        """Note that `twist` (6,) was sent for `duration` s: the points must move, too."""
        self._moved_since += duration * float(np.abs(twist).max())

    def drop(self, reason: Reason, text: str, received: Stamp) -> None:
        """Count a message that may not move the camera; it was at least heard."""
        self.heard = received
        self.bad, self.bad_text = reason, text
        self.bad_in_a_row += 1
        self.good_in_a_row = 0
        self.counts[reason] = self.counts.get(reason, 0) + 1

    def judge(self, view: View, received: Stamp) -> View | None:
        """Return the view, its stamp never later than its receipt, or None when it is dropped."""
        stamp, text = view.stamp, ''
        if stamp == 0 and self.settings.zero_stamp == 'receive':
            self.counts[Reason.STAMP_ZERO] = self.counts.get(Reason.STAMP_ZERO, 0) + 1
            stamp = received
        reason, text = self._fault_of(view, stamp, received)
        if reason is not Reason.NONE:
            self.drop(reason, text, received)
            return None
        self.heard = self.good = received
        self.image = stamp = min(stamp, received)
        self.bad, self.bad_text, self.bad_in_a_row = Reason.NONE, '', 0
        self.good_in_a_row += 1
        self.crowded = self._crowd(view.points_xy)
        if stamp == view.stamp:
            return view
        return View(stamp, view.frame_id, view.points_xy, view.goal_xy, view.depths,
                    view.goal_depths, view.weights, view.ids)

    def _fault_of(self, view: View, stamp: Stamp, received: Stamp) -> tuple[Reason, str]:
        reason, text = self._fault_of_stamp(stamp, received)
        if reason is Reason.NONE and self.camera is not None:
            if view.frame_id != self.camera.frame_id:
                return Reason.CAMERA_MISMATCH, (
                    f'features: expected frame {self.camera.frame_id!r} as in camera_info, '
                    f'got {view.frame_id!r}')
        if reason is Reason.NONE:
            reason, text = self._fault_of_points(view)
        if reason is Reason.NONE:
            reason, text = self._fault_of_change(view, received)
        return reason, text

    def _fault_of_stamp(self, stamp: Stamp, received: Stamp) -> tuple[Reason, str]:
        if stamp == 0:
            return Reason.STAMP_ZERO, 'features: expected a stamp, got zero'
        behind = age(stamp, received)
        if behind < -self.settings.future_tolerance:
            return Reason.STAMP_FUTURE, (
                f'features: expected a stamp at most {self.settings.future_tolerance:g} s ahead '
                f'of the clock, got {-behind:.3f} s')
        if self.image is not None and min(stamp, received) <= self.image:
            if stamp == self.image:
                return Reason.IMAGE_SILENT, (
                    'features: expected a new image within '
                    f'{self.settings.timeout:g} s, got the same one again')
            return Reason.STAMP_BACKWARD, (
                f'features: expected stamps that grow, got one {age(stamp, self.image):.3f} s '
                'before the last')
        if behind > self.settings.staleness:
            return Reason.FEATURES_STALE, (
                f'features: expected an image at most {self.settings.staleness:g} s old, got '
                f'{behind:.3f} s')
        return Reason.NONE, ''

    def _fault_of_points(self, view: View) -> tuple[Reason, str]:
        weights = view.weights
        if len(view) and not np.isfinite(view.goal_xy).any():
            return Reason.NO_GOAL, f'features: expected goal coordinates, got {len(view)} without'
        finite = (np.isfinite(view.points_xy).all() and np.isfinite(view.goal_xy).all()
                  and np.isfinite(weights).all() and not np.isinf(view.depths).any()
                  and not np.isinf(view.goal_depths).any())
        if not finite:
            return Reason.NOT_FINITE, 'features: expected finite numbers, got others'
        count = int(np.count_nonzero(weights > 0))
        if not count >= self.settings.least_points:
            return Reason.TOO_FEW_POINTS, (
                f'features: expected at least {self.settings.least_points} points, got {count}')
        return Reason.NONE, ''

    def _fault_of_change(self, view: View, received: Stamp) -> tuple[Reason, str]:
        """Notice a frozen picture under new stamps: the camera is moved, the points do not."""
        if self._points is None or not np.array_equal(self._points, view.points_xy):
            self._points, self._changed, self._moved_since = view.points_xy, received, 0.0
            return Reason.NONE, ''
        same = age(self._changed, received)
        if same <= self.settings.frozen or self._moved_since <= LEAST_MOTION:
            return Reason.NONE, ''
        return Reason.IMAGE_SILENT, (
            f'features: expected points that move with the camera within {self.settings.frozen:g} '
            f's, got the same ones for {same:.3f} s')

    def _crowd(self, points_xy: Floats) -> float:
        """Return the share of points in the band along the image border, or beyond it."""
        camera = self.camera
        if camera is None:
            return 0.0
        uv = camera.pixels_from_normalised(points_xy)
        band = self.settings.border * min(camera.size)
        inside = ((uv >= band) & (uv <= np.array(camera.size) - 1.0 - band)).all(-1)
        return 1.0 - float(np.count_nonzero(inside)) / len(points_xy)
