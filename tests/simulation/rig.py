# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Simulators with few words, and pictures whose every edge is known."""

from __future__ import annotations

import cv2
import numpy as np

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.settings import settings_from_mapping
from servo_nodes.simulation import render
from servo_nodes.simulation.simulator import Simulator, SimulatorSettings
from servo_nodes.simulation.texture import Face, Texture

MS = 1_000_000
GLOBAL = render.Shutter()


def settings_of(**groups) -> SimulatorSettings:
    """Return settings; a group is given as a mapping: `camera={'noise': 0}`."""
    return settings_from_mapping(SimulatorSettings, groups)


def simulator_of(seed: int = 0, photograph=None, **groups) -> Simulator:
    """Return a simulator with those settings."""
    return Simulator(settings_of(**groups), np.random.default_rng(seed), photograph)


def chequer(columns: int, rows: int, side: int, low: int = 60, high: int = 200):
    """Return a chessboard picture with squares of `side` texels."""
    squares = np.add.outer(np.arange(rows), np.arange(columns)) % 2
    return np.where(np.kron(squares, np.ones((side, side))) > 0, high, low).astype(np.uint8)


def inner_corners(columns: int, rows: int, square: float):
    """Return where the squares of such a board meet, (N, 3), m, its middle being the origin."""
    x = (np.arange(1, columns) - columns / 2) * square
    y = (np.arange(1, rows) - rows / 2) * square
    across, down = np.meshgrid(x, y)
    return np.stack([across.ravel(), down.ravel(), np.zeros(across.size)], axis=-1)


def backdrop(picture, width: float) -> Face:
    """Return an endless face with that picture."""
    return Face(Texture(picture, width), np.eye(4), endless=True)


def placed(face: Face, T_CF, twist=(0, 0, 0, 0, 0, 0)) -> render.Placed:
    """Return a face before a camera."""
    return render.Placed(face, np.asarray(T_CF), np.array(twist, dtype=np.float64))


def facing(distance: float, rotation=(0, 0, 0), shift=(0, 0)):
    """Return T_CF of a face `distance`, m, ahead."""
    return motion.pose_from_parts(motion.rotation_from_vector(rotation), (*shift, distance))


def projected(points, T_CF, camera: Camera):
    """Return pixels (N, 2) as OpenCV projects them."""
    rotation, _ = cv2.Rodrigues(T_CF[:3, :3])
    arguments = np.asarray(points).reshape(-1, 1, 3), rotation, T_CF[:3, 3].copy()
    distortion = np.array(camera.distortion) if camera.distortion else np.zeros(4)
    if camera.model == 'equidistant':
        return cv2.fisheye.projectPoints(*arguments, camera.matrix, distortion)[0].reshape(-1, 2)
    return cv2.projectPoints(*arguments, camera.matrix, distortion)[0].reshape(-1, 2)
