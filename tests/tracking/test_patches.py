# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Registration of patches against pictures whose shift, light and cover are known."""

from __future__ import annotations

import cv2
import numpy as np
import pytest

from servo_nodes.tracking.keypoints import strong_points
from servo_nodes.tracking.patches import RADIUS, Patches
from tests.tracking.stage import photograph

MARGIN = RADIUS + 12
# Reduced by four, so that a shift of the large picture is an exact fraction of a pixel here.
LARGE = cv2.GaussianBlur(cv2.resize(photograph('coffee'), (2560, 1920)), (0, 0), 2)


def _picture(right: int = 0, down: int = 0) -> np.ndarray:
    moved = np.roll(LARGE, (down, right), axis=(0, 1))
    return cv2.resize(moved, (640, 480), interpolation=cv2.INTER_AREA)


VIEW = _picture()
UV = strong_points(VIEW, 100, MARGIN)
PATCHES = Patches(VIEW, UV)
ALL = np.arange(len(UV))
SAME = np.broadcast_to(np.eye(2), (len(UV), 2, 2)).copy()


@pytest.mark.parametrize(('right', 'down'), [(0, 0), (1, 2), (-5, 3), (6, -7)])
def test_a_shift_is_found_to_a_fiftieth_of_a_pixel(right: int, down: int) -> None:
    found = PATCHES.register(_picture(right, down), UV, SAME, ALL, rounds=6)
    error = found.uv - UV - np.array([right, down]) / 4
    assert np.median(np.abs(error)) < 0.02
    assert np.median(found.likeness) > 0.99


@pytest.mark.parametrize(('gain', 'offset'), [(0.35, 0.0), (0.7, 60.0), (1.6, -50.0)])
def test_light_changes_neither_place_nor_likeness(gain: float, offset: float) -> None:
    picture = np.clip(np.rint(_picture(2, -3) * gain + offset), 0, 255).astype(np.uint8)
    found = PATCHES.register(picture, UV, SAME, ALL, rounds=6)
    assert np.median(np.abs(found.uv - UV - (0.5, -0.75))) < 0.03
    assert np.median(found.likeness) > 0.97


def test_noise_scatters_the_points_as_much_as_predicted() -> None:
    rng = np.random.default_rng(2)
    noisy = [np.clip(np.rint(VIEW + rng.normal(0, 4, VIEW.shape)), 0, 255).astype(np.uint8)
             for _ in range(12)]
    found = np.array([PATCHES.register(n, UV, SAME, ALL, rounds=3).uv for n in noisy])
    measured = np.sqrt(found.var(0, ddof=1).mean(-1))
    assert 0.7 < np.median(measured / (4 * PATCHES.scatter_px)) < 1.4


def test_covered_and_foreign_patches_are_unlike_the_goal() -> None:
    rng = np.random.default_rng(3)
    covered = VIEW.copy()
    covered[:, :320] = rng.integers(0, 255, (480, 320))
    found = PATCHES.register(covered, UV, SAME, ALL, rounds=3)
    hidden = UV[:, 0] < 320 - RADIUS
    free = UV[:, 0] > 320 + RADIUS
    assert found.likeness[hidden].max() < 0.5
    assert found.likeness[free].min() > 0.95


def test_a_patch_that_leaves_the_image_is_never_alike() -> None:
    outside = UV.copy()
    outside[:4] = [[3, 200], [636, 200], [300, 2], [np.nan, 5]]
    found = PATCHES.register(VIEW, outside, SAME, ALL, rounds=2)
    assert (found.likeness[:4] == -1).all()
    assert (found.likeness[4:] > 0.9).all()


def test_a_flat_image_is_like_nothing() -> None:
    flat = np.full_like(VIEW, 90)
    assert PATCHES.register(flat, UV, SAME, ALL, rounds=2).likeness.max() <= 0.0


def test_corners_are_taken_from_all_over_the_view() -> None:
    counts, _, _ = np.histogram2d(UV[:, 0], UV[:, 1], bins=(4, 3), range=((0, 640), (0, 480)))
    assert len(UV) == 100
    assert counts.min() >= 2
    assert len(np.unique(UV, axis=0)) == 100
