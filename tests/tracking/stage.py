# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A small stage for the tracker's tests: a photograph on a plane, seen through an exact lens.

Every pixel is the mean of samples on its own rays, so distortion and perspective are exact, and
where each point of the goal lies is known by geometry alone. Independent of the package's
simulator.
"""

from __future__ import annotations

import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.values import Calibration, Floats, Image

# Published calibrations: TUM fr1 RGB (plumb_bob) and EuRoC cam0, moved to this size (barrel); the
# rational and equidistant lens have numbers of our own.
LENSES: dict[str, tuple[str, tuple[float, ...], tuple[float, ...]]] = {
    'pinhole': ('plumb_bob', (525.0, 525.0, 319.5, 239.5), ()),
    'plumb_bob': ('plumb_bob', (517.3, 516.5, 318.6, 255.3),
                  (0.2624, -0.9531, -0.0054, 0.0026, 1.1633)),
    'barrel': ('plumb_bob', (458.654, 457.296, 317.215, 238.375),
               (-0.28340811, 0.07395907, 0.00019359, 1.76187114e-05, 0.0)),
    'rational': ('rational_polynomial', (520.0, 520.0, 320.0, 240.0),
                 (0.3, -0.1, 0.0005, -0.0003, 0.01, 0.5, 0.05, 0.0)),
    'equidistant': ('equidistant', (400.0, 400.0, 320.0, 240.0), (0.003, 0.0007, -0.002, 0.0002)),
}


def calibration_of(lens: str, width: int = 640, height: int = 480) -> Calibration:
    """Return the calibration of a named lens."""
    model, (fx, fy, cx, cy), d = LENSES[lens]
    return Calibration('camera', width, height, model, d, (fx, 0., cx, 0., fy, cy, 0., 0., 1.))


def photograph(name: str) -> npt.NDArray[np.uint8]:
    """Return a photograph of scikit-image's (bundled, no download), grey."""
    data = __import__('skimage.data', fromlist=[name])
    picture = np.asarray(getattr(data, name)())
    if picture.dtype != np.uint8:
        picture = (255 * picture).astype(np.uint8)
    return picture if picture.ndim == 2 else cv2.cvtColor(picture[..., :3], cv2.COLOR_RGB2GRAY)


def pose_facing(distance: float, *, shift: tuple[float, float] = (0.0, 0.0),
                turn_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)) -> Floats:
    """Return T_CW of a camera `distance` before the plane, then shifted (m) and turned."""
    home = np.eye(4)
    home[2, 3] = distance
    offset = motion.pose_from_parts(
        motion.rotation_from_vector(np.radians(turn_deg)), np.array([*shift, 0.0]))
    return typing.cast(Floats, motion.inverse(offset) @ home)


class Stage:
    """A plane z = 0 of the world, `wide` m across, with a photograph on it."""

    def __init__(self, picture: npt.NDArray[np.uint8], lens: str = 'plumb_bob', *,
                 wide: float = 0.6, samples: int = 3, size: tuple[int, int] = (640, 480),
                 border: int | None = None) -> None:
        self.calibration = calibration_of(lens, *size)
        self.camera = Camera.from_calibration(self.calibration)
        # Finer than any pixel, so that sampling it linearly is near enough to the photograph.
        self._texture = cv2.resize(picture, None, fx=3, fy=3, interpolation=cv2.INTER_CUBIC)
        high, across = self._texture.shape
        scale = across / wide
        self._to_texture = np.array([[scale, 0, across / 2 - 0.5], [0, scale, high / 2 - 0.5],
                                     [0, 0, 1]])
        # Beyond the picture: its mirror image, or one grey.
        self._border = ((cv2.BORDER_REFLECT_101, 0) if border is None
                        else (cv2.BORDER_CONSTANT, border))
        step = (np.arange(samples) + 0.5) / samples - 0.5
        u = (np.arange(size[0])[:, None] + step).ravel()
        v = (np.arange(size[1])[:, None] + step).ravel()
        grid = np.stack(np.meshgrid(u, v), axis=-1)
        rays = np.concatenate([
            self.camera.normalised_from_pixels(rows) for rows in np.array_split(grid, 8)])
        self._fine = rays.shape[:2]
        self._rays = np.ones((3, rays.shape[0] * rays.shape[1]), np.float32)
        self._rays[:2] = rays.reshape(-1, 2).T

    def render(self, T_CW: Floats, rng: np.random.Generator | None = None, noise: float = 2.0,
               gain: float = 1.0) -> npt.NDArray[np.uint8]:
        """Return the picture of a camera at T_CW; with grey noise when `rng` is given."""
        plane = np.linalg.inv(T_CW[:3, [0, 1, 3]])
        u, v, below = (self._to_texture @ plane).astype(np.float32) @ self._rays
        below = np.where(below > 0, below, np.float32(1e6))
        sampled = cv2.remap(self._texture, (u / below).reshape(self._fine),
                            (v / below).reshape(self._fine), cv2.INTER_LINEAR,
                            borderMode=self._border[0], borderValue=self._border[1])
        light = cv2.resize(sampled.astype(np.float32), self.camera.size,
                           interpolation=cv2.INTER_AREA) * np.float32(gain)
        if rng is not None:
            light += np.float32(noise) * rng.standard_normal(light.shape, np.float32)
        return np.clip(np.rint(light), 0, 255).astype(np.uint8)

    def image(self, T_CW: Floats, rng: np.random.Generator | None = None, *, stamp: int = 0,
              noise: float = 2.0, gain: float = 1.0) -> Image:
        """Return the same as an image message's value."""
        return Image(self.render(T_CW, rng, noise, gain), 'mono8', stamp, 'camera')

    def depths(self, T_CW: Floats, xy: Floats) -> Floats:
        """Return the depths (N,), m, of the plane along rays (N, 2) of a camera at T_CW."""
        normal, offset = T_CW[:3, 2], T_CW[:3, 2] @ T_CW[:3, 3]
        return typing.cast(Floats, offset / (xy @ normal[:2] + normal[2]))

    def moved(self, T_from: Floats, T_to: Floats, xy: Floats) -> tuple[Floats, Floats]:
        """Return where the points at rays `xy` of one camera lie for another, and depths."""
        z = self.depths(T_from, xy)
        points = np.concatenate([xy, np.ones((len(xy), 1))], axis=1) * z[:, None]
        both = T_to @ np.linalg.inv(T_from)
        there = points @ both[:3, :3].T + both[:3, 3]
        return there[:, :2] / there[:, 2:], there[:, 2]
