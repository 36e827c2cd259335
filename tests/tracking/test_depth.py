# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where depths come from, and that none is invented in holes and across edges."""

from __future__ import annotations

import numpy as np
import pytest

from servo_nodes.tracking import depth

UV = np.array([[20.0, 20], [50, 20], [20, 40], [45, 30]])


def test_a_ray_meets_the_plane_where_it_should() -> None:
    normal = np.array([0.36, -0.48, 0.8])
    plane = np.append(normal, 0.5)
    xy = np.array([[0.1, 0.2], [-0.3, 0.0], [-3.0, 2.0]])
    depths = depth.depths_on_plane(plane, xy)
    points = np.concatenate([xy, np.ones((3, 1))], axis=1) * depths[:, None]
    assert np.allclose(points[:2] @ normal, 0.5, atol=1e-12)
    assert np.isnan(depths[2])


def test_a_smooth_depth_image_is_read_as_it_is() -> None:
    rows, columns = np.mgrid[:60, :80]
    metres = (0.4 + 0.0005 * columns + 0.0002 * rows).astype(np.float32)
    read = depth.depths_in_image(metres, UV)
    assert np.allclose(read, 0.4 + 0.0005 * UV[:, 0] + 0.0002 * UV[:, 1], atol=1e-4)


def test_holes_edges_and_flying_pixels_give_no_depth() -> None:
    metres = np.full((60, 80), 0.4, np.float32)
    metres[:, 50:] = 0.8
    metres[17:24, 17:24] = np.nan
    metres[40, 20] = 0.6
    read = depth.depths_in_image(metres, np.vstack([UV, [[200.0, 5.0]], [[np.nan, 5.0]]]))
    assert np.isnan(read[0]), 'a hole'
    assert np.isnan(read[1]), 'an edge'
    assert read[2] == pytest.approx(0.4), 'a single flying pixel is outvoted'
    assert read[3] == pytest.approx(0.4)
    assert np.isnan(read[4:]).all(), 'outside'


def test_a_plane_is_fitted_through_noise_holes_and_foreign_surfaces() -> None:
    rng = np.random.default_rng(0)
    normal = np.array([0.2, -0.1, 1.0]) / np.linalg.norm([0.2, -0.1, 1.0])
    columns, rows = np.meshgrid(np.arange(80), np.arange(60))
    uv = np.stack([columns, rows], axis=-1).reshape(-1, 2)[::11].astype(float)
    grid = np.stack([(columns - 40) / 70, (rows - 30) / 70], axis=-1)
    truth = 0.42 / (grid @ normal[:2] + normal[2])
    metres = (truth + rng.normal(0, 5e-4, truth.shape)).astype(np.float32)
    metres[:, :15] = 0.25
    metres[40:, 60:] = np.nan
    fitted = depth.plane_in_depth(metres, (uv - (40, 30)) / 70, uv)
    assert fitted is not None
    plane, deviation = fitted
    assert np.degrees(np.arccos(plane[:3] @ normal)) < 0.3
    assert plane[3] == pytest.approx(0.42, abs=5e-4)
    assert deviation < 1e-3


def test_too_little_depth_makes_no_plane() -> None:
    assert depth.plane_in_depth(np.full((60, 80), np.nan, np.float32), UV / 100, UV) is None


@pytest.mark.parametrize(('source', 'now', 'words'), [
    ('auto', [0.5, 0.6, 0.84], 'image 1, marker 1, goal 1'),
    ('goal', [np.nan, 0.6, 0.84], 'marker 1, goal 1'),
    ('image', [0.5, np.nan, np.nan], 'image 1'),
    ('constant', [0.7, 0.7, 0.7], 'constant'),
    ('none', [np.nan] * 3, 'none')])
def test_each_point_takes_the_best_source_it_has(source: str, now: list[float],
                                                 words: str) -> None:
    nan = np.nan
    chosen = depth.chosen(
        source, ratios=np.array([2.0, 2, 2]), goal=np.array([nan, nan, 0.42]), constant=0.7,
        found=np.array([nan, 0.6, nan]), measured=np.array([0.5, nan, nan]))
    assert np.allclose(chosen.now, now, equal_nan=True)
    assert chosen.source == words
