# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What there is to see: flat textured faces, and points whose place is known.

The target's frame is the world's while nothing moves: origin in the middle of the plate, x right,
y down, z away from the camera, so that the plate is the plane z = 0 and what stands on it has
z < 0.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np

from servo_nodes.simulation import board, plate, relief
from servo_nodes.simulation.settings import SceneSettings
from servo_nodes.simulation.texture import Face, Pixels, Texture
from servo_nodes.values import Floats

HOME_DISTANCE = 0.42
_PHOTOGRAPH_POINTS = (6, 5)


@dataclass(frozen=True, eq=False)
class Scene:
    """The backdrop and the faces before it; landmarks (N, 3), m, in the target's frame."""

    faces: tuple[Face, ...]
    landmarks: Floats


def scene_from_settings(settings: SceneSettings, photograph: Pixels | None = None) -> Scene:
    """Return the scene of that kind; the photograph (uint8, BGR or grey) serves one of them.

    Raises
    ------
    ValueError
        When the photograph is wanted and absent, or the markers' dictionary is unknown.
    """
    if settings.kind == 'photograph':
        if photograph is None:
            raise ValueError('scene.kind: expected a photograph to be handed over, got none')
        return _scene_of_photograph(Texture(photograph, settings.width))
    if settings.kind == 'markers':
        return _scene_of_markers(settings.seed, settings.resolution, settings.width,
                                 settings.dictionary)
    if settings.kind == 'relief':
        return _scene_of_relief(settings.seed, settings.resolution)
    return _scene_of_plate(settings.seed, settings.resolution)


@functools.lru_cache(maxsize=2)
def _scene_of_plate(seed: int, resolution: float) -> Scene:
    picture = plate.drawn(np.random.default_rng(seed), resolution)
    return Scene((_backdrop(picture, resolution),), plate.landmarks())


@functools.lru_cache(maxsize=2)
def _scene_of_relief(seed: int, resolution: float) -> Scene:
    behind = _scene_of_plate(seed, resolution)
    blocks = relief.faces(np.random.default_rng([seed, 1]))
    return Scene((*behind.faces, *blocks),
                 np.concatenate([behind.landmarks, relief.landmarks()]))


@functools.lru_cache(maxsize=2)
def _scene_of_markers(seed: int, resolution: float, width: float, dictionary: str) -> Scene:
    picture = board.drawn(np.random.default_rng(seed), resolution, width, dictionary)
    return Scene((_backdrop(picture, resolution),), board.landmarks(width))


def _scene_of_photograph(texture: Texture) -> Scene:
    columns, rows = _PHOTOGRAPH_POINTS
    x, y = np.meshgrid(np.linspace(-0.4, 0.4, columns) * texture.width,
                       np.linspace(-0.4, 0.4, rows) * texture.height)
    landmarks = np.stack([x.ravel(), y.ravel(), np.zeros(x.size)], axis=-1)
    return Scene((Face(texture, np.eye(4), endless=True),), landmarks)


def _backdrop(picture: Pixels, resolution: float) -> Face:
    return Face(Texture(picture, picture.shape[1] * resolution), np.eye(4), endless=True)
