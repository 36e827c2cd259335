# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""From light to numbers: focus, brightness, vignetting, noise, bits; and what a depth camera says.

Out of focus, a point at depth Z spreads over a disc of f A |1/Z - 1/Zf| pixels (thin lens with
diameter A focused at Zf, far beyond its focal length; textbook optics, from memory); a disc of
diameter c has the standard deviation c/4 along each axis, and is drawn as a Gaussian of that
width.
"""

from __future__ import annotations

import functools
import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.camera import Camera
from servo_nodes.simulation.settings import CameraSettings, DepthSettings
from servo_nodes.simulation.texture import Pixels

Field: typing.TypeAlias = npt.NDArray[np.float32]

_BANK = 1 << 21
_LEAST_BLUR_PX = 0.2
_HOLE_PX = 6


class Noise:
    """White noise that costs little: windows, at random places, of one long row of values.

    Two images share values only where their windows overlap, and then at another place of the
    image; a pixel followed through time sees independent values.
    """

    def __init__(self, rng: np.random.Generator) -> None:
        self._rng = rng
        self._bank = rng.standard_normal(_BANK, np.float32)
        self._rounded: tuple[float, Pixels] = (0.0, np.zeros(0, np.int8))

    def normal(self, shape: tuple[int, ...]) -> Field:
        """Return values of standard deviation 1."""
        return self._window(self._bank, shape)

    def rounded(self, deviation: float, shape: tuple[int, ...]) -> Pixels:
        """Return whole numbers, int16, of that standard deviation before rounding."""
        if self._rounded[0] != deviation:
            self._rounded = deviation, np.round(self._bank * deviation).astype(np.int16)
        return self._window(self._rounded[1], shape)

    def _window(self, bank: npt.NDArray[typing.Any],
                shape: tuple[int, ...]) -> npt.NDArray[typing.Any]:
        size = int(np.prod(shape))
        if size >= len(bank):
            starts = self._rng.integers(0, len(bank), -(-size // len(bank)))
            long = np.concatenate([np.roll(bank, -start) for start in starts])
            return long[:size].reshape(shape)
        start = int(self._rng.integers(0, len(bank) - size))
        return bank[start:start + size].reshape(shape)


def exposed(light: Pixels, camera: Camera, settings: CameraSettings, noise: Noise, *,
            brightness: float, slope: float, depth: float) -> Pixels:
    """Return the image in the encoding of `settings`.

    Parameters
    ----------
    light : (h, w) or (h, w, 3), uint8, the scene as drawn, BGR
    camera : Camera, the true one
    settings : CameraSettings
    noise : Noise
    brightness : float, of the light
    slope : float, how much brighter the right border is than the middle
    depth : float, m, of what is in the middle of the image, for the focus
    """
    image = _focused(light, camera, settings, depth)
    factor = brightness * settings.gain
    deep = settings.encoding == 'mono16'
    plain = factor == 1 and slope == 0 and settings.vignetting == 0
    if plain and settings.shot_noise == 0 and not deep:
        if settings.noise * settings.gain > 0:
            grain = noise.rounded(settings.noise * settings.gain, image.shape)
            image = cv2.add(image, grain, dtype=cv2.CV_8U)
    else:
        level = image.astype(np.float32)
        if not plain:
            shading = factor * _shading(camera, settings.vignetting, slope)
            level *= shading if image.ndim == 2 else shading[..., None]
        np.clip(level, 0, 255, out=level)
        level += noise.normal(level.shape) * _deviation(level, settings)
        scale, kind = (257.0, np.uint16) if deep else (1.0, np.uint8)
        image = np.clip(np.rint(level * scale), 0, 255 * scale).astype(kind)
    if settings.encoding == 'rgb8':
        image = cv2.cvtColor(image, cv2.COLOR_BGR2RGB)
    return image


def measured_depth(inverse: Field, settings: DepthSettings, rng: np.random.Generator) -> Field:
    """Return the depth image (h, w), float32 m, from inverse depths; NaN where nothing is seen."""
    with np.errstate(divide='ignore'):
        depth = np.float32(settings.scale) / inverse
    if settings.noise > 0:
        depth += rng.standard_normal(depth.shape, np.float32) * settings.noise * depth ** 2
    depth[~((depth >= settings.nearest) & (depth <= settings.farthest))] = np.nan
    if settings.holes > 0:
        high, wide = depth.shape
        small = rng.random((high // _HOLE_PX + 2, wide // _HOLE_PX + 2), np.float32)
        lumps = cv2.resize(small, (wide, high), interpolation=cv2.INTER_CUBIC)
        depth[lumps <= np.quantile(lumps[::3, ::3], settings.holes)] = np.nan
    return typing.cast(Field, depth)


def _focused(light: Pixels, camera: Camera, settings: CameraSettings, depth: float) -> Pixels:
    if settings.aperture == 0 or not depth > 0:
        return light
    disc = camera.fx * settings.aperture * abs(1 / depth - 1 / settings.focus)
    if disc / 4 < _LEAST_BLUR_PX:
        return light
    blurred: Pixels = cv2.GaussianBlur(light, (0, 0), disc / 4)
    return blurred


def _deviation(level: Field, settings: CameraSettings) -> Field | float:
    """Return the noise of each pixel: that of the dark, and that of light, which grows with it."""
    dark = settings.noise * settings.gain
    if settings.shot_noise == 0:
        return dark
    share = settings.shot_noise ** 2 * settings.gain / 255
    return typing.cast(Field, np.sqrt(np.float32(dark ** 2) + np.float32(share) * level))


@functools.lru_cache(maxsize=8)
def _shading(camera: Camera, vignetting: float, slope: float) -> Field:
    """Return (h, w): 1 in the middle, less in the corners, and sloping from left to right."""
    u = np.linspace(-1, 1, camera.width, dtype=np.float32)
    v = np.linspace(-1, 1, camera.height, dtype=np.float32)[:, None]
    return typing.cast(Field, (1 - vignetting * ((u * u + v * v) / 2) ** 2) * (1 + slope * u))
