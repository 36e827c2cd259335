# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Two photographs of one painted wall, from far apart, against the published homography."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
import pytest

from servo_nodes.settings import settings_from_mapping
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from servo_nodes.values import Calibration, Image

# H1to3p.xml of ../shared/data/plane_pair, from the first picture to the second.
GOLD = np.array([[7.6285898e-01, -2.9922929e-01, 2.2567123e+02],
                 [3.3443473e-01, 1.0143901e+00, -7.6999973e+01],
                 [3.4663091e-04, -1.4364524e-05, 1.0]])


def _mapped(matrix: np.ndarray, uv: np.ndarray) -> np.ndarray:
    there = np.concatenate([uv, np.ones((len(uv), 1))], axis=1) @ matrix.T
    return there[:, :2] / there[:, 2:]


@pytest.mark.parametrize('kind', ['orb', 'sift'])
def test_the_wall_is_found_where_the_published_homography_puts_it(shared_data: Path,
                                                                  kind: str) -> None:
    first, second = (cv2.imread(str(shared_data / 'plane_pair' / name), cv2.IMREAD_GRAYSCALE)
                     for name in ('graf1.png', 'graf3.png'))
    calibration = Calibration('camera', 800, 640, 'plumb_bob', (),
                              (800., 0., 399.5, 0., 800., 319.5, 0., 0., 1.))
    settings = settings_from_mapping(TrackerSettings, {'detector.kind': kind})
    tracker = Tracker(settings, np.random.default_rng(0))
    tracker.calibrate(calibration)
    lesson = tracker.teach(Image(first, 'mono8', 0, 'camera'), taught='by a test')
    assert lesson.goal is not None
    tracker.aim(lesson.goal)
    assert len(tracker.look(Image(second, 'mono8', 1, 'camera'))) > 40
    assert tracker.status.homography is not None
    grid = np.stack(np.meshgrid(np.arange(0, 800, 20.0), np.arange(0, 640, 20.0)), -1)
    uv = grid.reshape(-1, 2)
    gold = _mapped(GOLD, uv)
    both = ((gold > 0) & (gold < (799, 639))).all(1)
    error = np.linalg.norm(_mapped(tracker.status.homography, uv[both]) - gold[both], axis=1)
    assert error.mean() < 0.6
    assert error.max() < 1.2
