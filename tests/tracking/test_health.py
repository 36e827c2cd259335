# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""An image that shows nothing, or nothing new, is recognised and named."""

from __future__ import annotations

import numpy as np
import pytest

from servo_nodes.tracking.health import Health
from servo_nodes.values import SECOND_NS

RNG = np.random.default_rng(0)
SCENE = RNG.integers(20, 230, (480, 640), dtype=np.uint8)


def _noisy(level: float) -> np.ndarray:
    return np.clip(RNG.normal(level, 2, SCENE.shape), 0, 255).astype(np.uint8)


@pytest.mark.parametrize(('picture', 'words'), [
    (_noisy(3), 'image is black'), (_noisy(255), 'image is white'),
    (_noisy(120), 'image has no contrast'), (SCENE, '')])
def test_a_picture_that_shows_nothing_is_named(picture: np.ndarray, words: str) -> None:
    fault = Health().fault(picture, 0, frozen_stops=True)
    assert fault.startswith(words)
    assert bool(fault) == bool(words)


def _after(seconds: float, *, images: int, frozen_stops: bool = True, change: bool = False) -> str:
    health, picture, fault = Health(), SCENE.copy(), ''
    for k in range(images):
        if change:
            picture[0, 0] ^= 1
        fault = health.fault(picture, int(k * seconds / (images - 1) * SECOND_NS),
                             frozen_stops=frozen_stops)
    return fault


def test_the_same_pixels_for_half_a_second_are_a_frozen_camera() -> None:
    assert _after(0.45, images=28) == ''
    assert _after(0.55, images=34).startswith('image is frozen: the same pixels for 0.6 s')
    assert _after(0.55, images=34, frozen_stops=False) == ''
    assert _after(0.55, images=34, change=True) == ''


def test_a_frozen_camera_that_moves_on_is_well_again() -> None:
    health = Health()
    for k in range(40):
        fault = health.fault(SCENE, k * SECOND_NS // 60, frozen_stops=True)
    assert fault.startswith('image is frozen')
    assert health.fault(SCENE[::-1], 41 * SECOND_NS // 60, frozen_stops=True) == ''


def test_a_camera_slower_than_the_limit_is_not_frozen_by_two_images() -> None:
    assert _after(2.0, images=2) == ''
