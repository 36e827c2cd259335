# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The few images of a replay that are worth showing, and the way of the points."""

from __future__ import annotations

import math
import typing

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal
from servo_nodes.offline.loops import Looked
from servo_nodes.report.overlay import encoded, overlay
from servo_nodes.report.record import Path, Picture
from servo_nodes.tracking.pictures import grey_from_image
from servo_nodes.values import Command, Image, Stamp, State, View

MOST_STOPS = 8
MOST_SAMPLES = 240
FIRST_APART_NS = 100_000_000
_STOPPED = (State.HOLDING, State.FAULTED)


class Album:
    """Picks images around every stop, and the first and the last with the loop on."""

    def __init__(self) -> None:
        self.pictures: list[Picture] = []
        self.size = (0, 0)
        self._now: Looked | None = None
        self._good: Looked | None = None
        self._command: Command | None = None
        self._stops = 0
        self._after = False

    def look(self, looked: Looked) -> None:
        """Take what the tracker saw."""
        self._now = looked
        self.size = looked.image.array.shape[1], looked.image.array.shape[0]
        if self._after and looked.status.acquired:
            self._after = False
            self._add('stop', looked, 'seen again')
        if looked.status.acquired:
            self._good = looked

    def turn(self, command: Command) -> None:
        """Take a change of state or reason."""
        before, self._command = self._command, command
        if self._now is None:
            return
        if command.state is State.SERVOING and not any(
                picture.name == 'start' for picture in self.pictures):
            self._add('start', self._now, 'the loop is switched on')
        stops = command.state in _STOPPED and (before is None or before.state not in _STOPPED)
        if stops and self._stops < MOST_STOPS:
            self._stops += 1
            if self._good is not None and self._good is not self._now:
                self._add('stop', self._good, 'the last image with points')
            self._add('stop', self._now, command.reason.value.replace('_', ' '))
            self._after = command.state is State.HOLDING

    def close(self, goal: Goal | None) -> list[Picture]:
        """Return the pictures; the last image and the goal view are added."""
        if self._now is not None and self._command is not None:
            self._add('end', self._now, 'the last image')
        if goal is not None:
            self.pictures.append(Picture('goal', 0, 'the taught view',
                                         encoded(np.asarray(goal.view))))
        return self.pictures

    def _add(self, name: str, looked: Looked, caption: str) -> None:
        """Draw what is known of an image; an image that no picture can show is left out."""
        command, status = self._command, looked.status
        figures = {} if command is None else command.figures
        try:
            pixels = _shown(looked.image)
        except ValueError:
            return
        error = figures.get('error_px', math.nan)
        drawn = overlay(
            pixels, points_px=status.points_px, goal_px=status.goal_px,
            homography=status.homography, state=None if command is None else command.state,
            reason='' if command is None else command.reason.value, text=status.reason,
            error_px=error if math.isfinite(error) else None,
            points=(status.inliers, status.points))
        self.pictures.append(Picture(name, looked.time, caption, encoded(drawn)))


class Ways:
    """Where each goal point was seen: sampled, sparser the longer it lasts."""

    def __init__(self) -> None:
        self._samples: list[tuple[Stamp, View]] = []
        self._apart = FIRST_APART_NS
        self._last: Stamp | None = None

    def add(self, time: Stamp, view: View) -> None:
        """Take a view, when it is time for one."""
        if not len(view) or (self._last is not None and time - self._last < self._apart):
            return
        self._last = time
        self._samples.append((time, view))
        if len(self._samples) > MOST_SAMPLES:
            self._apart *= 2
            del self._samples[1::2]

    def paths(self, camera: Camera | None) -> list[Path]:
        """Return the ways in pixels of a camera; without one there are none."""
        if camera is None or not self._samples:
            return []
        found: dict[int, list[tuple[Stamp, typing.Any]]] = {}
        goals: dict[int, typing.Any] = {}
        for time, view in self._samples:
            uv = camera.pixels_from_normalised(view.points_xy)
            goal_uv = camera.pixels_from_normalised(view.goal_xy)
            sure = np.isfinite(uv).all(-1) & np.isfinite(goal_uv).all(-1)
            for ident, now, goal in zip(view.ids[sure].tolist(), uv[sure], goal_uv[sure],
                                        strict=True):
                found.setdefault(ident, []).append((time, now))
                goals[ident] = goal
        return [Path(ident, goals[ident], np.array([time for time, _ in rows], np.int64),
                     np.array([uv for _, uv in rows]))
                for ident, rows in sorted(found.items())]


def _shown(image: Image) -> typing.Any:
    if image.encoding == 'bgr8':
        return np.ascontiguousarray(image.array)
    return grey_from_image(image)
