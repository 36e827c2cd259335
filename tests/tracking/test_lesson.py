# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Teaching: good views are taken, poor ones warned about, hopeless ones refused."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
import pytest

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal, load, save
from servo_nodes.settings import settings_from_mapping
from servo_nodes.tracking import judge
from servo_nodes.tracking.tracker import Lesson, Tracker, TrackerSettings
from servo_nodes.values import Image
from tests.tracking.stage import Stage, photograph, pose_facing

HOME = pose_facing(0.42, turn_deg=(12.0, -8.0, 0.0))


@pytest.fixture(scope='module')
def stage() -> Stage:
    """Return a stage with a cup of coffee on it."""
    return Stage(photograph('coffee'), samples=2)


def _lesson(stage: Stage, pixels: np.ndarray, depth: Image | None = None,
            **changes: object) -> Lesson:
    names = {name.replace('__', '.'): value for name, value in changes.items()}
    settings = settings_from_mapping(TrackerSettings, {'teach.distance': 0.42, **names})
    tracker = Tracker(settings, np.random.default_rng(0))
    tracker.calibrate(stage.calibration)
    return tracker.teach(Image(pixels, 'mono8', 0, 'camera'), depth, taught='by a test')


def _noisy(pixels: np.ndarray) -> np.ndarray:
    noise = np.random.default_rng(1).normal(0, 2, pixels.shape)
    return (pixels + noise).clip(0, 255).astype(np.uint8)


def test_a_good_view_is_taken_and_its_checks_are_written(stage: Stage, tmp_path: Path) -> None:
    lesson = _lesson(stage, stage.render(HOME, np.random.default_rng(0)))
    assert lesson.answer.ok
    assert lesson.goal is not None
    assert np.allclose(lesson.goal.plane, [0, 0, 1, 0.42])
    save(lesson.goal, tmp_path)
    checks = load(tmp_path).checks
    assert checks['verdict'] == 'accepted'
    assert checks['warnings'] == []
    assert checks['points'] == 120
    assert set(checks['scatter']) == set(judge.AXES)
    assert 0 < checks['scatter']['x'] < 1e-4


def _depth(stage: Stage) -> np.ndarray:
    columns, rows = np.meshgrid(np.arange(640), np.arange(480))
    xy = stage.camera.normalised_from_pixels(np.stack([columns, rows], -1).reshape(-1, 2))
    return stage.depths(HOME, xy).reshape(480, 640)


def test_a_depth_image_of_a_flat_target_gives_its_plane(stage: Stage) -> None:
    raw = np.rint(1000 * _depth(stage)).astype(np.uint16)
    lesson = _lesson(stage, stage.render(HOME, np.random.default_rng(0)),
                     Image(raw, '16UC1', 0, 'camera'))
    assert lesson.goal is not None
    assert lesson.goal.depth is None
    normal, distance = HOME[:3, 2], HOME[:3, 2] @ HOME[:3, 3]
    assert np.degrees(np.arccos(lesson.goal.plane[:3] @ normal)) < 0.2
    assert lesson.goal.plane[3] == pytest.approx(distance, abs=5e-4)
    assert lesson.goal.checks['depth_from'] == 'plane in the depth image'


def test_a_depth_image_with_relief_is_kept_as_a_map(stage: Stage) -> None:
    metres = _depth(stage).astype(np.float32)
    metres += 0.05 * np.sin(np.arange(640) / 40)[None].astype(np.float32)
    lesson = _lesson(stage, stage.render(HOME, np.random.default_rng(0)),
                     Image(metres, '32FC1', 0, 'camera'))
    assert lesson.goal is not None
    assert lesson.goal.depth is not None
    assert lesson.goal.checks['depth_from'] == 'depth image'


def test_a_view_without_texture_is_refused(stage: Stage) -> None:
    flat = np.full((480, 640), 120, np.uint8)
    lesson = _lesson(stage, cv2.circle(flat, (320, 240), 30, 200, -1))
    assert lesson.goal is None
    assert lesson.answer.text.startswith('refused: ')
    assert 'usable points, 30 needed' in lesson.answer.text


def test_a_view_with_points_in_one_corner_only_is_refused(stage: Stage) -> None:
    flat = np.full((480, 640), 120, np.uint8)
    flat[40:46, 30:610] = np.random.default_rng(0).integers(0, 255, (6, 580))
    lesson = _lesson(stage, flat, teach__least_points=12)
    assert lesson.goal is None
    assert 'line or in a corner' in lesson.answer.text


def test_a_view_that_repeats_itself_is_refused(stage: Stage) -> None:
    tile = cv2.GaussianBlur(np.random.default_rng(0).integers(0, 255, (80, 80), np.uint8),
                            (0, 0), 2)
    tile = cv2.normalize(tile, None, 20, 235, cv2.NORM_MINMAX)
    lesson = _lesson(stage, _noisy(np.tile(tile, (6, 8))))
    assert lesson.goal is None
    assert 'the view repeats itself' in lesson.answer.text


def test_a_blurred_view_is_warned_about_and_refused_on_request(stage: Stage) -> None:
    blurred = _noisy(cv2.GaussianBlur(stage.render(HOME), (0, 0), 5))
    lesson = _lesson(stage, blurred)
    assert lesson.goal is not None
    assert lesson.goal.checks['verdict'] == 'warned'
    assert 'warning: ' in lesson.answer.text
    strict = _lesson(stage, blurred, teach__accept_warnings=False)
    assert strict.goal is None
    assert strict.answer.text.startswith('refused: ')


def test_an_overexposed_view_is_warned_about(stage: Stage) -> None:
    bright = stage.render(HOME, np.random.default_rng(0), gain=2.5)
    lesson = _lesson(stage, bright)
    assert 'black or white' in lesson.answer.text


def test_a_view_of_another_size_is_refused(stage: Stage) -> None:
    lesson = _lesson(stage, np.zeros((240, 320), np.uint8))
    assert lesson.goal is None
    assert 'expected 640x480 px' in lesson.answer.text
    tracker = Tracker(TrackerSettings(), np.random.default_rng(0))
    lesson = tracker.teach(Image(np.zeros((480, 640), np.uint8), 'mono8', 0, ''), taught='')
    assert lesson.answer.text == 'no usable camera_info yet'


def test_noise_is_measured_on_texture() -> None:
    picture = photograph('coffee')
    noisy = (picture + np.random.default_rng(0).normal(0, 5, picture.shape)).clip(0, 255)
    assert judge.noise_of(noisy.astype(np.uint8)) == pytest.approx(5, rel=0.35)
    assert judge.noise_of(np.full((64, 64), 9, np.uint8)) == 0.5


def test_the_predicted_scatter_is_the_scatter_of_poses() -> None:
    # Monte Carlo against the closed form: points are shaken, the pose solved by least squares.
    rng = np.random.default_rng(3)
    camera = Camera(640, 480, 520.0, 520.0, 319.5, 239.5)
    uv = rng.uniform((20, 20), (620, 460), (80, 2))
    xy = camera.normalised_from_pixels(uv)
    evidence = judge.Evidence(uv, xy, np.full(80, 0.42), np.full(80, 0.01))
    predicted, condition = judge.pose_scatter(evidence, 2.0, camera.fx)
    object_points = np.concatenate([xy * 0.42, np.zeros((80, 1))], axis=1)
    poses = []
    for _ in range(200):
        shaken = uv + rng.normal(0, 0.02 * np.sqrt(2), uv.shape)
        _, turn, shift = cv2.solvePnP(object_points, shaken, camera.matrix, None,
                                      rvec=np.zeros((3, 1)), tvec=np.array([[0, 0, 0.42]]),
                                      useExtrinsicGuess=True)
        rotation = cv2.Rodrigues(turn)[0]
        poses.append(np.concatenate([rotation.T @ -shift.ravel() + (0, 0, 0.42),
                                     -turn.ravel()]))
    measured = np.std(poses, axis=0)
    assert np.all(np.abs(measured / predicted - 1) < 0.25)
    assert condition > 1


def test_points_without_depth_have_no_predictable_scatter() -> None:
    evidence = judge.Evidence(np.zeros((9, 2)), np.zeros((9, 2)), np.full(9, np.nan), np.ones(9))
    scatter, _ = judge.pose_scatter(evidence, 2.0, 500.0)
    assert np.isinf(scatter).all()
    goal = Goal(np.zeros((480, 640), np.uint8), Camera(640, 480, 500., 500., 319.5, 239.5),
                np.array([0, 0, 1, 0.4]))
    spread = judge.Evidence(np.random.default_rng(0).uniform(0, 480, (40, 2)),
                            np.zeros((40, 2)), np.full(40, np.nan), np.ones(40))
    verdict = judge.judged(goal, spread, least_points=30, elsewhere=None)
    assert 'the pose would scatter' in verdict.refusal
