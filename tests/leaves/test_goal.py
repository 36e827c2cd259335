# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A goal's folder: kept whole, and harmless whatever a stranger puts into it."""

from __future__ import annotations

import re
from pathlib import Path

import cv2
import numpy as np
import pytest

from servo_nodes.camera import Camera
from servo_nodes.goal import Goal, load, png_size, save

CAMERA = Camera(64, 48, 50.0, 51.0, 31.5, 23.5, 'rational_polynomial',
                (0.1, -0.2, 0.001, -0.002, 0.01, 0.3, 0.02, 0.0), 'hand_optical_frame')


def _goal(**changes: object) -> Goal:
    view = np.random.default_rng(0).integers(0, 255, (48, 64), dtype=np.uint8)
    parts: dict[str, object] = {
        'view': view, 'camera': CAMERA, 'plane': [0.0, 0.6, 0.8, 0.42], 'taught': 'by a test',
        'checks': {'points': 97, 'warnings': ['dark'], 'scatter': {'x': 1e-5}}}
    return Goal(**{**parts, **changes})  # type: ignore[arg-type]


def test_a_goal_comes_back_from_its_folder_as_it_was(tmp_path: Path) -> None:
    depth = np.full((48, 64), 0.4321, np.float32)
    depth[3, 5] = np.nan
    goal = _goal(depth=depth)
    save(goal, tmp_path / 'new' / 'flap')
    back = load(tmp_path / 'new' / 'flap')
    assert np.array_equal(back.view, goal.view)
    assert back.camera == CAMERA
    assert np.allclose(back.plane, goal.plane, atol=1e-15)
    assert (back.taught, dict(back.checks)) == (goal.taught, dict(goal.checks))
    assert back.depth is not None
    assert np.isnan(back.depth[3, 5])
    assert np.nanmax(np.abs(back.depth - depth)) <= 0.0005 + 1e-6


def test_saving_a_goal_without_depth_removes_a_former_depth_map(tmp_path: Path) -> None:
    save(_goal(depth=np.full((48, 64), 0.4, np.float32)), tmp_path)
    save(_goal(), tmp_path)
    assert load(tmp_path).depth is None
    assert not (tmp_path / 'depth.png').exists()


def test_the_values_of_a_goal_cannot_be_changed_behind_its_back() -> None:
    goal = _goal()
    with pytest.raises(ValueError, match='read-only'):
        goal.view[0, 0] = 1


@pytest.mark.parametrize(('changes', 'words'), [
    ({'view': np.zeros((48, 63), np.uint8)}, 'view: expected grey uint8 of 64x48'),
    ({'view': np.zeros((48, 64, 3), np.uint8)}, 'view: expected grey'),
    ({'plane': [0, 0, 1, np.nan]}, 'plane: expected four finite numbers'),
    ({'plane': [0, 0, 2, 0.4]}, 'plane: expected a unit normal'),
    ({'plane': [0, 0, 1, -0.4]}, 'plane: expected a unit normal'),
    ({'depth': np.zeros((4, 4), np.float32)}, 'depth: expected 64x48 px'),
])
def test_a_goal_that_contradicts_itself_is_refused(changes: dict[str, object],
                                                   words: str) -> None:
    with pytest.raises(ValueError, match=words):
        _goal(**changes)


def _edited(folder: Path, old: str, new: str) -> None:
    path = folder / 'goal.yaml'
    text = path.read_text(encoding='utf-8')
    assert old in text
    path.write_text(text.replace(old, new), encoding='utf-8')


@pytest.mark.parametrize(('old', 'new', 'words'), [
    ('format: 1', 'format: 7', 'expected format 1, got 7'),
    ('fx: 50.0', 'fx: fast', 'camera: fx: expected int or float'),
    ('fx: 50.0', 'fx: .nan', 'camera: calibration: expected finite numbers'),
    ('width: 64', 'width: 65', 'view.png: expected 65x48 px as the camera has, got 64x48'),
    ('distance: 0.42', 'distance: -.inf', 'plane: expected four finite numbers'),
    ('taught: by a test', 'taught: [1, 2]', 'taught: expected str'),
    ('taught: by a test', 'taught: {', 'expected YAML'),
    ('taught: by a test', 'taught: !!python/object/apply:os.getcwd []', 'expected YAML'),
    ('depth: null', 'depth: depth.png', 'depth.png: expected a readable file'),
])
def test_a_damaged_page_is_named_in_one_sentence(tmp_path: Path, old: str, new: str,
                                                 words: str) -> None:
    save(_goal(), tmp_path)
    _edited(tmp_path, old, new)
    with pytest.raises(ValueError, match=re.escape(words)) as refusal:
        load(tmp_path)
    assert 'goal.yaml' in str(refusal.value) or 'depth.png' in str(refusal.value)
    assert '\n' not in str(refusal.value)


def test_an_absent_folder_is_named(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match=r'nowhere/goal\.yaml: expected a readable file'):
        load(tmp_path / 'nowhere')


def test_a_picture_that_announces_a_huge_size_is_refused_unopened(tmp_path: Path) -> None:
    save(_goal(), tmp_path)
    head = bytearray((tmp_path / 'view.png').read_bytes())
    head[16:24] = (60000).to_bytes(4, 'big') * 2
    (tmp_path / 'view.png').write_bytes(bytes(head))
    with pytest.raises(ValueError, match=r'view\.png: expected 64x48 px .* got 60000x60000'):
        load(tmp_path)


@pytest.mark.parametrize(('data', 'words'), [
    (b'GIF89a' + bytes(40), 'expected a PNG picture'),
    (b'', 'expected a PNG picture'),
])
def test_a_file_that_is_no_png_is_refused(tmp_path: Path, data: bytes, words: str) -> None:
    save(_goal(), tmp_path)
    (tmp_path / 'view.png').write_bytes(data)
    with pytest.raises(ValueError, match=words):
        load(tmp_path)


def test_a_cut_off_or_coloured_picture_is_refused(tmp_path: Path) -> None:
    save(_goal(), tmp_path)
    whole = (tmp_path / 'view.png').read_bytes()
    (tmp_path / 'view.png').write_bytes(whole[:60])
    with pytest.raises(ValueError, match='expected a grey uint8 picture, got a damaged one'):
        load(tmp_path)
    cv2.imwrite(str(tmp_path / 'view.png'), np.zeros((48, 64, 3), np.uint8))
    with pytest.raises(ValueError, match='expected a grey uint8 picture'):
        load(tmp_path)


def test_an_endless_page_is_refused(tmp_path: Path) -> None:
    save(_goal(), tmp_path)
    with (tmp_path / 'goal.yaml').open('a', encoding='utf-8') as file:
        file.write('# ' + 'x' * 300_000)
    with pytest.raises(ValueError, match='expected at most 262144 bytes'):
        load(tmp_path)


def test_a_folder_that_cannot_be_written_is_named(tmp_path: Path) -> None:
    (tmp_path / 'taken').write_text('a file, not a folder')
    with pytest.raises(ValueError, match='taken: expected a place to write'):
        save(_goal(), tmp_path / 'taken')


def test_the_size_in_a_png_head_is_what_opencv_writes() -> None:
    ok, data = cv2.imencode('.png', np.zeros((7, 9), np.uint8))
    assert ok
    assert png_size(data.tobytes()) == (9, 7)
    assert png_size(b'not a picture') is None
