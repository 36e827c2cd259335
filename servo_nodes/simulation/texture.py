# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A picture with a size in metres, sampled without aliasing from any distance.

The picture is kept, softened, at sizes that fall by sqrt(2), each softened before it is made
smaller; an image takes the one whose texels are as large as its own pixels on the surface, so
that what it shows is neither aliased nor blurred by more than a real lens does. Texel (0, 0) is
the centre of the first texel, at every size.
"""

from __future__ import annotations

import math
import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats

Pixels: typing.TypeAlias = npt.NDArray[typing.Any]

_STEP = math.sqrt(2.0)
_SOFTENING = 0.55
_LEAST_SIDE = 8


class Level(typing.NamedTuple):
    """One size: `pixels` and the matrix (3, 3) from metres on the surface to texels."""

    pixels: Pixels
    texels_from_metres: Floats


class Texture:
    """A picture on a flat surface, whose origin is the picture's middle; x right, y down.

    Parameters
    ----------
    pixels : (height, width, 3) or (height, width), uint8, BGR or grey
    width : float, m
    height : float, m; by default the texels are square
    """

    def __init__(self, pixels: Pixels, width: float, height: float | None = None) -> None:
        if pixels.dtype != np.uint8 or pixels.ndim not in (2, 3) or (
                pixels.ndim == 3 and pixels.shape[2] != 3):
            raise ValueError('texture: expected uint8 of shape (height, width) or (height, width, '
                             f'3), got {pixels.dtype} of shape {pixels.shape}')
        if not width > 0:
            raise ValueError(f'width: expected a positive size in m, got {width!r}')
        self.width = float(width)
        square = width * pixels.shape[0] / pixels.shape[1]
        self.height = square if height is None else float(height)
        self.pitch = width / pixels.shape[1]
        self._pixels = pixels
        self._levels: dict[bool, list[Level]] = {False: [], True: []}

    def level_for(self, footprint: float, *, grey: bool) -> Level:
        """Return the size for image pixels that cover `footprint`, m, on the surface."""
        levels = self._levels[grey]
        if not levels:
            levels.append(self._level(_softened(_converted(self._pixels, grey))))
        wanted = max(0, math.floor(2 * math.log2(max(1.2 * footprint / self.pitch, 1.0))))
        while len(levels) <= wanted and min(levels[-1].pixels.shape[:2]) >= 2 * _LEAST_SIDE:
            levels.append(self._level(_smaller(levels[-1].pixels)))
        return levels[min(wanted, len(levels) - 1)]

    def _level(self, pixels: Pixels) -> Level:
        high, wide = pixels.shape[:2]
        across, down = wide / self.width, high / self.height
        return Level(pixels, np.array([[across, 0, wide / 2 - 0.5], [0, down, high / 2 - 0.5],
                                       [0, 0, 1]]))


@dataclass(frozen=True, eq=False)
class Face:
    """A flat picture in space.

    Attributes
    ----------
    texture : Texture
    T_SF : (4, 4), pose of the face in its scene; the picture lies in z = 0, seen from z < 0
    endless : bool, the picture is mirrored beyond its borders (a backdrop)
    """

    texture: Texture
    T_SF: Floats
    endless: bool = False


def _converted(pixels: Pixels, grey: bool) -> Pixels:
    if grey == (pixels.ndim == 2):
        return pixels
    return cv2.cvtColor(pixels, cv2.COLOR_BGR2GRAY if grey else cv2.COLOR_GRAY2BGR)


def _softened(pixels: Pixels) -> Pixels:
    return cv2.GaussianBlur(pixels, (0, 0), _SOFTENING, borderType=cv2.BORDER_REFLECT_101)


def _smaller(pixels: Pixels) -> Pixels:
    high, wide = pixels.shape[:2]
    return cv2.resize(_softened(pixels), (round(wide / _STEP), round(high / _STEP)),
                      interpolation=cv2.INTER_LINEAR)
