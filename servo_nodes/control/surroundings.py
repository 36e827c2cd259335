# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the world around the loop says: camera, graph, operator, pace. Notes only, no judgement."""

from __future__ import annotations

from servo_nodes.camera import Camera
from servo_nodes.values import SECOND_NS, Stamp


class Surroundings:
    """The notes; the gate reads them at every tick."""

    def __init__(self) -> None:
        self.camera: Camera | None = None
        self.camera_fault = self.camera_changed = ''
        self.publishers = self.listeners = 1
        self.halt = self.halted = False
        self.beat: Stamp | None = None
        self.late = 0.0
        self.late_in_a_row = 0
        self.slept = 0.0
        self._is_late = False

    def calibrate(self, camera: Camera, *, engaged: bool) -> bool:
        """Take a camera; return whether it is a new one, which is a fault while engaged."""
        self.camera_fault = ''
        if camera == self.camera:
            return False
        if engaged:
            self.camera_changed = (f'camera_info: expected to stay {_words(self.camera)}, '
                                   f'got {_words(camera)}')
        self.camera = camera
        return True

    def set_halt(self, on: bool) -> None:
        """Take the halt input; it latches."""
        self.halt = on
        self.halted = self.halted or on

    def set_late(self, late_ns: int) -> None:
        """Note that the coming tick is late."""
        self.late, self._is_late = late_ns / SECOND_NS, True

    def tick(self, slept: float) -> None:
        """Count late ticks in a row, at each tick; `slept` is the time since the one before, s."""
        self.slept = slept
        self.late_in_a_row = self.late_in_a_row + 1 if self._is_late else 0
        self._is_late = False

    def release(self) -> None:
        """Forget what was latched."""
        self.halted, self.camera_changed = self.halt, ''
        self.late_in_a_row, self.slept = 0, 0.0


def _words(camera: Camera | None) -> str:
    if camera is None:
        return 'no camera'
    return (f'{camera.width}x{camera.height} px, fx {camera.fx:g}, fy {camera.fy:g}, '
            f'cx {camera.cx:g}, cy {camera.cy:g}, {camera.model} {list(camera.distortion)}, '
            f'frame {camera.frame_id!r}')
