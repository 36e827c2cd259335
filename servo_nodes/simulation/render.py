# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faces through a lens: which texel each pixel sees, and how far away.

A face with pose T_CF = (R, t) maps its points (X, Y) to H (X, Y, 1) with H = [r1 r2 t], and H
(X, Y, 1) = z (x, y, 1). So for the ray (x, y, 1) of a pixel, inverse(H) (x, y, 1) = (X, Y, 1) /
z: its ratios are the place on the face, and its last entry is the inverse depth. The rays carry
the lens, exactly: the pixel's centre is taken back through the distortion once for each camera.
"""

from __future__ import annotations

import functools
import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.camera import Camera
from servo_nodes.simulation.scene import Face
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Floats

_FAR_AWAY = 1e6


class Rays(typing.NamedTuple):
    """Rays (h, w, 2), normalised, float32, and where the lens has none (h, w), or None."""

    xy: npt.NDArray[np.float32]
    blind: npt.NDArray[np.bool_] | None


@functools.lru_cache(maxsize=8)
def rays_of(camera: Camera) -> Rays:
    """Return the ray of every pixel's centre."""
    grid = np.stack(np.meshgrid(np.arange(camera.width), np.arange(camera.height)), axis=-1)
    xy = camera.normalised_from_pixels(grid)
    lost = np.isnan(xy).any(-1)
    xy[lost] = _FAR_AWAY
    return Rays(xy.astype(np.float32), lost if lost.any() else None)


def sampled(face: Face, T_CF: Floats, camera: Camera, *, grey: bool) -> Pixels:
    """Return what the camera sees of an endless face."""
    inverse = np.linalg.inv(T_CF[:3, [0, 1, 3]])
    level = face.texture.level_for(_footprint(inverse, camera), grey=grey)
    texels = cv2.perspectiveTransform(rays_of(camera).xy, level.texels_from_metres @ inverse)
    return cv2.remap(level.pixels, texels, None, cv2.INTER_LINEAR,
                     borderMode=cv2.BORDER_REFLECT_101)


def inverse_depths(T_CF: Floats, camera: Camera) -> npt.NDArray[np.float32]:
    """Return 1/z (h, w), 1/m, of the endless plane of a face; not positive where it is not hit."""
    last = np.linalg.inv(T_CF[:3, [0, 1, 3]])[2].astype(np.float32)
    xy = rays_of(camera).xy
    return xy @ last[:2] + last[2]


def _footprint(inverse: Floats, camera: Camera) -> float:
    """Return how much of the face, m, a pixel in the middle of the image covers."""
    x, y, w = inverse[:, 2]
    jacobian = (inverse[:2, :2] - np.outer((x / w, y / w), inverse[2, :2])) / w
    return float(np.sqrt(abs(np.linalg.det(jacobian)) / (camera.fx * camera.fy)))
