# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The tracker on photographs with exact truth: found, followed, held to the goal, never wrong."""

from __future__ import annotations

import cv2
import numpy as np
import pytest

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.settings import settings_from_mapping
from servo_nodes.tracking.finder import RayGrid
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from servo_nodes.values import Calibration, Image, View
from tests.tracking.stage import LENSES, Stage, calibration_of, photograph, pose_facing

HOME = pose_facing(0.42)
AWAY = pose_facing(0.5, shift=(0.05, -0.04), turn_deg=(8.0, -6.0, 20.0))


def _settings(**changes: object) -> TrackerSettings:
    names = {name.replace('__', '.'): value for name, value in changes.items()}
    return settings_from_mapping(TrackerSettings, {'teach.distance': 0.42, **names})


def _taught(stage: Stage, rng: np.random.Generator, **changes: object) -> Tracker:
    tracker = Tracker(_settings(**changes), rng)
    assert tracker.calibrate(stage.calibration).ok
    lesson = tracker.teach(stage.image(HOME, rng), taught='by a test')
    assert lesson.goal is not None, lesson.answer.text
    assert tracker.aim(lesson.goal).ok
    return tracker


def _errors_px(stage: Stage, view: View, pose: np.ndarray) -> np.ndarray:
    there, _ = stage.moved(HOME, pose, view.goal_xy)
    return np.linalg.norm(there - view.points_xy, axis=1) * stage.camera.fx


def _pose(k: int) -> np.ndarray:
    """Return the k-th pose of a smooth motion around home, at 60 images/s and up to 6 cm/s."""
    t = k / 60
    return pose_facing(0.42 + 0.03 * np.sin(t), shift=(0.03 * np.sin(1.3 * t), 0.02 * np.sin(t)),
                       turn_deg=(4 * np.sin(0.9 * t), 5 * np.sin(1.1 * t), 15 * np.sin(0.7 * t)))


@pytest.fixture(scope='module')
def coins() -> Stage:
    """Return a stage with coins on it, seen through a real lens."""
    return Stage(photograph('coins'), samples=2)


@pytest.mark.parametrize('lens', sorted(LENSES))
def test_points_and_depths_are_true_through_every_lens(lens: str) -> None:
    rng = np.random.default_rng(0)
    stage = Stage(photograph('camera'), lens, samples=2)
    tracker = _taught(stage, rng)
    for pose in (AWAY, AWAY, HOME):
        view = tracker.look(stage.image(pose, rng, stamp=5))
        assert (view.stamp, view.frame_id) == (5, 'camera')
        assert len(view) >= 60
        errors = _errors_px(stage, view, pose)
        assert np.median(errors) < 0.06
        assert errors.max() < 1.0
        there, depths = stage.moved(HOME, pose, view.goal_xy)
        assert np.allclose(view.depths, depths, rtol=1e-3)
        assert np.allclose(view.goal_depths, 0.42, rtol=1e-9)
        assert view.weights.min() > 0


@pytest.mark.parametrize('lens', sorted(LENSES))
def test_the_rays_of_a_search_are_those_of_the_lens(lens: str) -> None:
    camera = Camera.from_calibration(calibration_of(lens))
    uv = np.random.default_rng(0).uniform((0, 0), (639, 479), (500, 2))
    xy = RayGrid(camera).normalised(uv)
    error = np.linalg.norm(camera.pixels_from_normalised(xy) - uv, axis=1)
    assert error.max() < 0.25
    assert RayGrid(camera).normalised(np.empty((0, 2))).shape == (0, 2)


def test_the_status_tells_an_overlay_where_points_are(coins: Stage) -> None:
    rng = np.random.default_rng(0)
    tracker = _taught(coins, rng)
    view = tracker.look(coins.image(AWAY, rng))
    status = tracker.status
    assert status.acquired
    assert status.inliers == len(view)
    assert status.points_px is not None
    assert np.allclose(coins.camera.normalised_from_pixels(status.points_px), view.points_xy,
                       atol=1e-8)
    assert status.goal_px is not None
    assert np.allclose(coins.camera.normalised_from_pixels(status.goal_px), view.goal_xy,
                       atol=1e-8)
    assert status.residual_px < 0.1
    assert status.depth_source == f'goal {len(view)}'


def test_points_do_not_drift_and_keep_their_numbers(coins: Stage) -> None:
    rng = np.random.default_rng(1)
    tracker = _taught(coins, rng)
    goal = {}
    early, late = [], []
    for k in range(0, 240, 2):
        view = tracker.look(coins.image(_pose(k), rng, stamp=k * 16_666_667))
        assert len(view) > 60
        for name, place in zip(view.ids.tolist(), view.goal_xy.tolist(), strict=True):
            assert goal.setdefault(name, place) == place
        (early if k < 40 else late if k >= 200 else []).extend(
            _errors_px(coins, view, _pose(k)).tolist())
    assert np.median(late) < 0.05
    assert np.median(late) < 1.5 * np.median(early)


@pytest.mark.parametrize('kind', ['orb', 'sift'])
def test_the_goal_is_found_turned_tilted_near_and_far(coins: Stage, kind: str) -> None:
    rng = np.random.default_rng(2)
    tracker = _taught(coins, rng, detector__kind=kind)
    for roll, tilt, scale in ((45, 30, 0.6), (-45, -30, 0.7), (45, -30, 1.7), (-40, 0, 1.5),
                              (0, 30, 1.0), (20, 15, 0.6)):
        turn = motion.rotation_from_vector(np.radians([0, 0, roll])) @ (
            motion.rotation_from_vector(np.radians([0.6 * tilt, 0.8 * tilt, 0])))
        pose = motion.pose_from_parts(turn, np.array([0, 0, 0.42 / scale]))
        tracker.look(Image(np.zeros((480, 640), np.uint8), 'mono8', 0, 'camera'))
        view = tracker.look(coins.image(pose, rng))
        assert len(view) >= 16, tracker.status.reason
        assert np.median(_errors_px(coins, view, pose)) < 0.15


def test_nothing_else_is_ever_taken_for_the_goal(coins: Stage) -> None:
    rng = np.random.default_rng(3)
    tracker = _taught(coins, rng)
    for name in ('brick', 'grass', 'page', 'text', 'gravel', 'camera', 'coffee', 'chelsea'):
        other = Stage(photograph(name), samples=1)
        for pose in (HOME, AWAY):
            assert len(tracker.look(other.image(pose, rng))) == 0, name
            assert not tracker.status.acquired
            assert tracker.status.reason.startswith('goal not found')
    for level in (0, 90, 255):
        noise = rng.normal(level, 2, (480, 640)).clip(0, 255).astype(np.uint8)
        assert len(tracker.look(Image(noise, 'mono8', 0, 'camera'))) == 0
        assert tracker.status.reason.startswith('image')


def test_a_followed_goal_that_is_swapped_for_another_picture_is_lost_at_once(
        coins: Stage) -> None:
    rng = np.random.default_rng(4)
    tracker = _taught(coins, rng)
    other = Stage(photograph('brick'), samples=1)
    for k in range(3):
        assert len(tracker.look(coins.image(_pose(k), rng))) > 60
    assert len(tracker.look(other.image(_pose(3), rng))) == 0


def test_after_total_occlusion_the_goal_is_back_within_three_images(coins: Stage) -> None:
    rng = np.random.default_rng(5)
    tracker = _taught(coins, rng)
    for k in range(5):
        tracker.look(coins.image(_pose(k), rng))
    for _ in range(10):
        hand = rng.normal(80, 6, (480, 640)).clip(0, 255).astype(np.uint8)
        assert len(tracker.look(Image(hand, 'mono8', 0, 'camera'))) == 0
    seen = [len(tracker.look(coins.image(_pose(65 + k), rng))) for k in range(3)]
    assert max(seen) > 60
    assert seen[2] > 60


def test_half_an_occlusion_leaves_the_other_half_true(coins: Stage) -> None:
    rng = np.random.default_rng(6)
    tracker = _taught(coins, rng)
    for k in range(6):
        image = coins.image(_pose(k), rng)
        if k >= 3:
            image.array[:, :290] = rng.integers(0, 255, (480, 290))
        view = tracker.look(image)
        assert len(view) > 25
        assert tracker.status.points_px is not None
        assert np.median(_errors_px(coins, view, _pose(k))) < 0.06
    assert tracker.status.points_px[:, 0].min() > 285


@pytest.mark.parametrize('stops', [1.5, -1.5])
def test_an_exposure_step_of_one_and_a_half_stops_loses_nothing(coins: Stage,
                                                                stops: float) -> None:
    rng = np.random.default_rng(7)
    tracker = Tracker(_settings(), rng)
    tracker.calibrate(coins.calibration)
    lesson = tracker.teach(coins.image(HOME, rng, gain=0.6), taught='by a test')
    assert lesson.goal is not None
    tracker.aim(lesson.goal)
    for k in range(9):
        gain = 0.6 * 2 ** stops if 3 <= k < 6 else 0.6
        view = tracker.look(coins.image(_pose(k), rng, gain=gain))
        assert len(view) > 40
        assert np.median(_errors_px(coins, view, _pose(k))) < 0.1


def test_motion_blur_is_followed_or_lost_and_never_wrong(coins: Stage) -> None:
    rng = np.random.default_rng(8)
    tracker = _taught(coins, rng)
    for k, length in enumerate((1, 5, 9, 15, 31, 61, 1)):
        kernel = np.full((1, length), 1 / length, np.float32)
        image = coins.image(_pose(k), rng)
        view = tracker.look(Image(cv2.filter2D(image.array, -1, kernel), 'mono8', k, 'camera'))
        if len(view):
            assert np.median(_errors_px(coins, view, _pose(k))) < 0.1 + 0.05 * length
    assert len(view) > 60


def test_a_camera_with_a_frozen_image_sees_nothing(coins: Stage) -> None:
    rng = np.random.default_rng(9)
    tracker = _taught(coins, rng)
    image = coins.image(HOME, rng)
    seen = [len(tracker.look(Image(image.array, 'mono8', k * 20_000_000, 'camera')))
            for k in range(30)]
    assert min(seen[:20]) > 60
    assert seen[-1] == 0
    assert 'frozen' in tracker.status.reason
    assert len(tracker.look(coins.image(HOME, rng, stamp=700_000_000))) > 60


def test_a_depth_image_is_used_where_it_knows(coins: Stage) -> None:
    rng = np.random.default_rng(10)
    tracker = _taught(coins, rng, teach__distance=0.6)
    metres = np.full((480, 640), 0.42, np.float32)
    metres[:, 320:] = np.nan
    view = tracker.look(coins.image(HOME, rng), Image(metres, '32FC1', 0, 'camera'))
    left = coins.camera.pixels_from_normalised(view.points_xy)[:, 0] < 310
    assert np.allclose(view.depths[left], 0.42, atol=1e-6)
    assert np.allclose(view.depths[~left & (view.points_xy[:, 0] > 0.05)], 0.6, rtol=1e-3)
    assert tracker.status.depth_source.startswith('image ')
    view = tracker.look(coins.image(HOME, rng), Image(metres[:9], '32FC1', 0, 'camera'))
    assert len(view) > 60
    assert 'depth' in tracker.status.reason


def test_the_world_faults_are_told_and_never_raised(coins: Stage) -> None:
    rng = np.random.default_rng(11)
    tracker = Tracker(_settings(), rng)
    image = coins.image(HOME, rng)
    assert len(tracker.look(image)) == 0
    assert tracker.status.reason == 'no usable camera_info yet'
    tracker.calibrate(coins.calibration)
    assert len(tracker.look(image)) == 0
    assert tracker.status.reason.startswith('no goal')
    tracker = _taught(coins, rng)
    assert len(tracker.look(Image(image.array[:100], 'mono8', 0, 'camera'))) == 0
    assert 'expected 640x480 px' in tracker.status.reason
    assert len(tracker.look(Image(image.array, 'sharp', 0, 'camera'))) == 0
    assert tracker.status.reason.startswith('image encoding')
    assert len(tracker.look(image)) > 60


def test_a_goal_of_another_camera_is_refused_with_the_numbers(coins: Stage) -> None:
    rng = np.random.default_rng(12)
    tracker = _taught(coins, rng)
    goal = tracker.goal
    assert goal is not None
    c = coins.calibration
    half = Calibration('camera', 320, 240, c.model, c.d, c.k)
    longer = Calibration('camera', 640, 480, c.model, c.d, (700., *c.k[1:4], 700., *c.k[5:]))
    other = Calibration('left', 640, 480, c.model, c.d, c.k)
    for calibration, words in ((half, 'taught with, 640x480 px, got 320x240'),
                               (longer, 'same ray'), (other, "'camera', got 'left'")):
        answer = tracker.calibrate(calibration)
        assert not answer.ok
        assert words in answer.text
        assert len(tracker.look(coins.image(HOME, rng))) == 0
        assert not tracker.aim(goal).ok
    assert tracker.calibrate(c).ok
    assert len(tracker.look(coins.image(HOME, rng))) > 60


def test_a_goal_given_before_the_camera_waits_for_it(coins: Stage) -> None:
    rng = np.random.default_rng(13)
    goal = _taught(coins, rng).goal
    assert goal is not None
    tracker = Tracker(_settings(), rng)
    assert tracker.aim(goal).ok
    assert tracker.calibrate(coins.calibration).ok
    assert tracker.calibrate(coins.calibration).text == 'camera unchanged'
    assert len(tracker.look(coins.image(HOME, rng))) > 60


def test_an_unusable_calibration_is_refused_and_nothing_is_seen(coins: Stage) -> None:
    tracker = _taught(coins, np.random.default_rng(14))
    answer = tracker.calibrate(Calibration('camera', 640, 480, 'plumb_bob', (), (0.0,) * 9))
    assert not answer.ok
    assert answer.text.startswith('camera_info: ')
    assert len(tracker.look(coins.image(HOME))) == 0


def test_new_settings_are_taken_whole_or_not_at_all(coins: Stage) -> None:
    tracker = _taught(coins, np.random.default_rng(15))
    assert tracker.adopt(_settings(detector__points=40)).ok
    assert len(tracker.look(coins.image(HOME, np.random.default_rng(0)))) <= 40
    former = tracker.settings
    answer = tracker.adopt(_settings(detector__kind='marker'))
    assert not answer.ok
    assert tracker.settings is former
    assert len(tracker.look(coins.image(HOME, np.random.default_rng(1)))) > 20


def test_the_same_images_give_the_same_views(coins: Stage) -> None:
    def run() -> list[View]:
        rng = np.random.default_rng(16)
        tracker = _taught(coins, rng)
        return [tracker.look(coins.image(_pose(4 * k), rng)) for k in range(5)]
    for one, other in zip(run(), run(), strict=True):
        assert np.array_equal(one.points_xy, other.points_xy)
        assert np.array_equal(one.ids, other.ids)


def test_a_simple_law_on_the_views_ends_at_the_goal(coins: Stage) -> None:
    # Interaction matrix of a point: Espiau, Chaumette & Rives 1992. The plant is exact.
    rng = np.random.default_rng(17)
    tracker, pose = _taught(coins, rng), AWAY
    for k in range(40):
        view = tracker.look(coins.image(pose, rng, stamp=k * 50_000_000))
        assert len(view) > 50
        x, y = view.points_xy.T
        near, zero = 1 / view.depths, np.zeros(len(view))
        rows = np.stack([
            np.stack([-near, zero, x * near, x * y, -(1 + x * x), y], axis=-1),
            np.stack([zero, -near, y * near, 1 + y * y, -x * y, -x], axis=-1)], axis=1)
        error = (view.points_xy - view.goal_xy).reshape(-1)
        twist = -np.linalg.lstsq(rows.reshape(-1, 6), error, rcond=None)[0]
        pose = motion.exp(-0.2 * twist) @ pose
    rest = HOME @ motion.inverse(pose)
    assert np.linalg.norm(rest[:3, 3]) < 1e-4
    assert np.degrees(motion.angle_between(np.eye(3), rest[:3, :3])) < 0.02
