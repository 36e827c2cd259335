# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What there is to see: flat textured faces, and points whose place is known.

The target's frame is the world's while nothing moves: origin in the middle of the plate, x
right, y down, z away from the camera, so that the plate is the plane z = 0 and what stands on it
has z < 0.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np

from servo_nodes.simulation import plate
from servo_nodes.simulation.texture import Pixels, Texture
from servo_nodes.values import Floats

HOME_DISTANCE = 0.42


@dataclass(frozen=True, eq=False)
class Face:
    """A flat picture in space.

    Attributes
    ----------
    texture : Texture
    T_SF : (4, 4), pose of the face in the scene; the picture lies in its plane z = 0
    endless : bool, the picture is mirrored beyond its borders (a backdrop)
    """

    texture: Texture
    T_SF: Floats
    endless: bool = False


@dataclass(frozen=True, eq=False)
class Scene:
    """Faces, and landmarks (N, 3), m, in the target's frame."""

    faces: tuple[Face, ...]
    landmarks: Floats


def scene_from_settings(kind: str, seed: int, resolution: float,
                        photograph: Pixels | None = None, width: float = 0.6) -> Scene:
    """Return the scene of that kind; the photograph (uint8, BGR or grey) serves one of them."""
    if kind == 'photograph':
        if photograph is None:
            raise ValueError('scene.kind: expected a photograph to be handed over, got none')
        texture = Texture(photograph, width)
    else:
        texture = _plate_texture(seed, resolution)
    return Scene((Face(texture, np.eye(4), endless=True),), plate.landmarks())


@functools.lru_cache(maxsize=2)
def _plate_texture(seed: int, resolution: float) -> Texture:
    picture = plate.drawn(np.random.default_rng(seed), resolution)
    return Texture(picture, picture.shape[1] * resolution)
