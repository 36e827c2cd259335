# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What changes by itself: the light, a target that drifts or swings, a sleeve that passes."""

from __future__ import annotations

import functools
import math

import numpy as np

from servo_nodes import motion
from servo_nodes.simulation.canvas import Canvas, box
from servo_nodes.simulation.settings import LightSettings, OccluderSettings, SceneSettings
from servo_nodes.simulation.texture import Face, Texture
from servo_nodes.values import Floats

_SLEEVE_LENGTH = 2.0
_INSTANT = 1e-4


def target_pose(scene: SceneSettings, t: float) -> Floats:
    """Return T_WT (4, 4) at `t`, s: what drift and vibration made of the target's place."""
    if _is_at_rest(scene):
        return np.eye(4)
    swing = math.sin(2 * math.pi * scene.vibration_rate * t)
    swung = motion.pose_from_parts(np.eye(3), np.multiply(scene.vibration, swing))
    pose: Floats = swung @ motion.exp(np.multiply(scene.drift, t))
    return pose


def target_twist(scene: SceneSettings, t: float) -> Floats:
    """Return the target's twist (6,) at `t`, s, in its own frame."""
    if _is_at_rest(scene):
        return np.zeros(6)
    before, after = target_pose(scene, t - _INSTANT), target_pose(scene, t + _INSTANT)
    return motion.log(motion.inverse(before) @ after) / (2 * _INSTANT)


def _is_at_rest(scene: SceneSettings) -> bool:
    return not any(scene.drift) and not any(scene.vibration)


def brightness(light: LightSettings, t: float) -> float:
    """Return how bright the scene is at `t`, s; 1 shows it as drawn."""
    swing = light.flicker * math.sin(2 * math.pi * light.flicker_rate * t)
    return max(0.0, (light.level + light.fade * t) * (1 + swing))


def occluder_pose(occluder: OccluderSettings, t: float) -> Floats:
    """Return T_WO (4, 4) of the sleeve at `t`, s."""
    x = (occluder.speed * t) % occluder.travel - occluder.travel / 2
    return motion.pose_from_parts(np.eye(3), (x, 0.0, -occluder.height))


@functools.lru_cache(maxsize=2)
def sleeve(size: float, seed: int) -> Face:
    """Return the sleeve of a high-visibility jacket, `size`, m, wide: orange, silver bands."""
    rng = np.random.default_rng(seed)
    canvas = Canvas(size, _SLEEVE_LENGTH, 0.001, rng)
    across = np.linspace(-1, 1, canvas.size[0])
    folds = canvas.clouds(0.06)
    tone = (0.45 + 0.55 * np.sqrt(1 - 0.9 * across ** 2)) * (0.7 + 0.5 * folds)
    canvas.cover(tone.astype(np.float32), np.array([[[30., 110., 245.]]], np.float32))
    for y in np.arange(-_SLEEVE_LENGTH / 2, _SLEEVE_LENGTH / 2, 0.22):
        band = [box(-size, y, size, y + 0.05)]
        canvas.lay(band, (0.3 + 0.7 * tone).astype(np.float32), (216., 214., 208.))
        canvas.shade([box(-size, y - 0.004, size, y + 0.054), *band], 0.6, soft=0.001)
    return Face(Texture(canvas.pixels, size, _SLEEVE_LENGTH), np.eye(4))
