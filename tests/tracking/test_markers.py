# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Markers: corners, ids, depth and both poses, on drawn markers, real photographs and oracles."""

from __future__ import annotations

import json
from pathlib import Path

import cv2
import numpy as np
import pytest

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.settings import settings_from_mapping
from servo_nodes.tracking.markers import Corners, Markers, pose_of_plane
from servo_nodes.tracking.options import MarkerOptions
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from tests.tracking.stage import Stage, pose_facing

needs_aruco = pytest.mark.skipif(
    not hasattr(cv2, 'aruco'), reason='this OpenCV comes without its aruco module')
SQUARE = np.array([[-0.1, -0.1, 0], [0.1, -0.1, 0], [0.1, 0.1, 0], [-0.1, 0.1, 0]])


def _seen(points: np.ndarray, pose: np.ndarray) -> np.ndarray:
    there = points @ pose[:3, :3].T + pose[:3, 3]
    return there[:, :2] / there[:, 2:]


def test_both_minima_of_the_check_values_are_found_and_told_apart() -> None:
    # Row PNP of the check values (IPPE and SciPy): the second minimum lies at -24.5098 degrees.
    pose = motion.pose_from_parts(motion.rotation_from_vector(np.radians([30.0, 0, 0])),
                                  np.array([0, 0, 1.0]))
    found = pose_of_plane(SQUARE, _seen(SQUARE, pose))
    assert found is not None
    assert found.rival is not None
    assert np.allclose(found.T_CM, pose, atol=1e-6)
    assert not found.is_ambiguous
    # The closed form's second answer lies near that minimum, not in it.
    turn = np.degrees(motion.vector_from_rotation(found.rival[:3, :3]))
    assert turn[0] == pytest.approx(-24.5, abs=6)


def test_a_small_square_seen_straight_on_is_called_ambiguous() -> None:
    rng = np.random.default_rng(0)
    small = 0.1 * SQUARE
    pose = motion.pose_from_parts(motion.rotation_from_vector(np.radians([4.0, 0, 0])),
                                  np.array([0, 0, 1.0]))
    xy = _seen(small, pose) + rng.normal(0, 0.2 / 520, (4, 2))
    found = pose_of_plane(small, xy)
    assert found is not None
    assert found.is_ambiguous
    assert pose_of_plane(small[:3], xy[:3]) is None
    assert pose_of_plane(small, np.full((4, 2), np.nan)) is None


@needs_aruco
def test_corners_in_real_photographs_lie_where_another_program_found_them(
        shared_data: Path) -> None:
    # gold.json: corners as asserted by the detector's own tests; see ../shared/data/README.md.
    folder = shared_data / 'marker_photos'
    gold = json.loads((folder / 'gold.json').read_text())
    markers = Markers(MarkerOptions(dictionary='5x5_1000', side=gold['marker_length_m']))
    for name in ('tag_01_d7_14cm.png', 'tag_245-246_d7_14cm.png'):
        corners = markers.corners(cv2.imread(str(folder / name), cv2.IMREAD_GRAYSCALE))
        want = gold['images'][name]
        assert set(corners.ids // 4) == {entry['id'] for entry in want}
        for entry in want:
            mine = corners.uv[corners.ids // 4 == entry['id']]
            assert np.linalg.norm(mine - entry['corners'], axis=1).max() < 0.3


@needs_aruco
def test_the_distance_of_a_real_marker_is_the_published_one(shared_data: Path) -> None:
    folder = shared_data / 'marker_photos'
    gold = json.loads((folder / 'gold.json').read_text())
    info = gold['camera_info']
    camera = Camera(info['width'], info['height'], info['K'][0], info['K'][4], info['K'][2],
                    info['K'][5], info['distortion_model'], tuple(info['D']))
    picture = cv2.imread(str(folder / '403.jpg'), cv2.IMREAD_GRAYSCALE)
    markers = Markers(MarkerOptions(dictionary='5x5_1000', side=gold['marker_length_m']))
    corners = markers.corners(picture)
    assert set(corners.ids // 4) == {403}
    depths = markers.depths(corners, camera.normalised_from_pixels(corners.uv))
    rays = np.concatenate([camera.normalised_from_pixels(corners.uv), np.ones((4, 1))], axis=1)
    middle = (rays * depths[:, None]).mean(0)
    # Camera in the base link: 0.035, 0.145, 0.14; marker there: 0.7611, 0.2505, 0.4028 (gold).
    pose = gold['images']['403.jpg']['pose_in_base_link']
    true = np.linalg.norm(np.array([pose['x'], pose['y'], pose['z']]) - (0.035, 0.145, 0.14))
    assert np.linalg.norm(middle) == pytest.approx(true, rel=0.01)


def _board() -> np.ndarray:
    """Draw a ChArUco board of 7 x 5 squares, 80 px each, in a white frame of 40 px."""
    aruco = cv2.aruco
    dictionary = aruco.getPredefinedDictionary(aruco.DICT_4X4_50)
    if not hasattr(aruco, 'CharucoBoard_create'):
        drawn = aruco.CharucoBoard((7, 5), 0.04, 0.03, dictionary).generateImage((560, 400))
    else:
        drawn = aruco.CharucoBoard_create(7, 5, 0.04, 0.03, dictionary).draw((560, 400))
    return cv2.copyMakeBorder(drawn, 40, 40, 40, 40, cv2.BORDER_CONSTANT, value=255)


@needs_aruco
def test_the_corners_of_a_board_and_their_depth_are_exact() -> None:
    markers = Markers(MarkerOptions(dictionary='4x4_50', side=0.03, board=(7.0, 5.0, 0.04)))
    corners = markers.corners(_board())
    assert len(corners) == 24
    grid = np.stack([corners.ids % 6, corners.ids // 6], axis=-1)
    assert np.abs(corners.uv - (119.5 + 80 * grid)).max() < 0.1
    camera = Camera(640, 480, 500.0, 500.0, 319.5, 239.5)
    depths = markers.depths(corners, camera.normalised_from_pixels(corners.uv))
    assert np.allclose(depths, 500 * 0.04 / 80, rtol=2e-3)


def _markers_picture() -> np.ndarray:
    """Draw four AprilTags of 160 px on a white sheet of 600 x 450 px."""
    aruco = cv2.aruco
    name = next(n for n in dir(aruco) if n.upper() == 'DICT_APRILTAG_36H11')
    dictionary = aruco.getPredefinedDictionary(getattr(aruco, name))
    draw = aruco.generateImageMarker if hasattr(aruco, 'generateImageMarker') else aruco.drawMarker
    sheet = np.full((450, 600), 235, np.uint8)
    for k, (row, column) in enumerate([(30, 60), (30, 380), (250, 60), (250, 380)]):
        sheet[row:row + 160, column:column + 160] = np.clip(draw(dictionary, k, 160), 20, 235)
    return sheet


@pytest.fixture(scope='module')
def sheet() -> Stage:
    """Return the sheet 0.3 m across: tags of 0.08 m."""
    return Stage(_markers_picture(), 'plumb_bob', wide=0.3, border=235)


@needs_aruco
def test_markers_are_followed_with_true_corners_and_depths(sheet: Stage) -> None:
    rng = np.random.default_rng(0)
    settings = settings_from_mapping(TrackerSettings, {
        'detector.kind': 'marker', 'marker.dictionary': 'apriltag_36h11', 'marker.side': 0.08})
    tracker = Tracker(settings, rng)
    tracker.calibrate(sheet.calibration)
    home = pose_facing(0.42)
    lesson = tracker.teach(sheet.image(home, rng), taught='by a test')
    assert lesson.goal is not None, lesson.answer.text
    assert tracker.aim(lesson.goal).ok
    for turn in (-30.0, 0.0, 40.0):
        pose = pose_facing(0.5, shift=(0.02, -0.01), turn_deg=(6.0, -5.0, turn))
        view = tracker.look(sheet.image(pose, rng))
        assert len(view) == 16
        there, depths = sheet.moved(home, pose, view.goal_xy)
        error = np.linalg.norm(there - view.points_xy, axis=1) * sheet.camera.fx
        assert np.median(error) < 0.3
        assert np.allclose(view.depths, depths, rtol=0.01)
        assert tracker.status.depth_source == 'marker 16'


@needs_aruco
def test_a_marker_seen_twice_counts_as_not_seen() -> None:
    picture = _markers_picture()
    picture[250:410, 380:540] = picture[30:190, 60:220]
    corners = Markers(MarkerOptions(side=0.08)).corners(picture)
    assert set(corners.ids // 4) == {1, 2}


@needs_aruco
@pytest.mark.parametrize('picture', [np.zeros((480, 640), np.uint8),
                                     np.full((480, 640), 255, np.uint8)])
def test_no_marker_is_no_corner(picture: np.ndarray) -> None:
    corners = Markers(MarkerOptions()).corners(picture)
    assert isinstance(corners, Corners)
    assert len(corners) == 0


@needs_aruco
def test_a_view_without_its_markers_makes_no_goal(sheet: Stage) -> None:
    settings = settings_from_mapping(TrackerSettings, {
        'detector.kind': 'marker', 'marker.dictionary': '4x4_50'})
    tracker = Tracker(settings, np.random.default_rng(0))
    tracker.calibrate(sheet.calibration)
    lesson = tracker.teach(sheet.image(pose_facing(0.42)), taught='by a test')
    assert lesson.goal is None
    assert '0 usable points' in lesson.answer.text
