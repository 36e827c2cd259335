# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""How much the simulator's pictures cost beside the bare OpenCV warp they are made of.

The reference is the warp of the very picture: the rays of all pixels to texels by
`cv2.perspectiveTransform`, the texels to grey levels by `cv2.remap`, on the same texture. Picture
and warp take turns, so that a busy machine slows both; the figure is a ratio of medians.
"""

from __future__ import annotations

import time
import typing
from collections.abc import Callable

import cv2
import numpy as np

from servo_nodes import motion
from servo_nodes.settings import settings_from_mapping
from servo_nodes.simulation import render
from servo_nodes.simulation.simulator import Simulator, SimulatorSettings

REPEATS = 60
_START = {'start.translation': (0.03, -0.02, -0.05), 'start.rotation': (0.1, -0.12, 0.2)}
_CASES: dict[str, dict[str, object]] = {
    'render': {},
    'render_relief': {'scene.kind': 'relief'},
    'render_colour': {'camera.encoding': 'bgr8'},
    'render_rolling_blur': {'camera.exposure': 0.01, 'camera.readout': 0.016},
}


def measure(seed: int) -> dict[str, float]:
    """Return milliseconds and ratios; `render_over_warp` is the one that is bounded (1.5)."""
    figures: dict[str, float] = {}
    for name, values in _CASES.items():
        settings = settings_from_mapping(SimulatorSettings, {**_START, **values})
        simulator = Simulator(settings, np.random.default_rng(seed))
        simulator.apply((0.05, 0.02, 0.1, 0.1, -0.1, 0.3), 0)
        warp = bare_warp(simulator)
        picture_s, warp_s = _medians(simulator.expose, warp)
        figures[f'{name}_ms'] = 1e3 * picture_s
        figures[f'{name}_over_warp'] = picture_s / warp_s
        if name == 'render':
            figures['warp_ms'] = 1e3 * warp_s
    return figures


def bare_warp(simulator: Simulator) -> Callable[[], typing.Any]:
    """Return OpenCV's part of the simulator's next picture, with everything else made before."""
    camera, settings = simulator.camera, simulator.settings
    T_CF = motion.inverse(simulator.pose)
    matrix = np.linalg.inv(T_CF[:3, [0, 1, 3]])
    texture = simulator.scene.faces[0].texture
    footprint = -simulator.pose[2, 3] / camera.fx
    level = texture.level_for(footprint, grey=settings.camera.encoding.startswith('mono'))
    rays, unused = render.rays_of(camera).xy, typing.cast(typing.Any, None)

    def warp() -> typing.Any:
        texels = cv2.perspectiveTransform(rays, level.texels_from_metres @ matrix)
        return cv2.remap(level.pixels, texels, unused, cv2.INTER_LINEAR,
                         borderMode=cv2.BORDER_REFLECT_101)

    return warp


def _medians(one: Callable[[], typing.Any], other: Callable[[], typing.Any]
             ) -> tuple[float, float]:
    """Return the median duration, s, of two calls that take turns."""
    for _ in range(3):
        one()
        other()
    spans = np.empty((REPEATS, 2))
    for row in spans:
        for column, call in enumerate((one, other)):
            start = time.perf_counter()
            call()
            row[column] = time.perf_counter() - start
    first, second = np.median(spans, axis=0)
    return float(first), float(second)
