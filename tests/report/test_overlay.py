# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The overlay draws what is known where it is, and leaves the rest of the image alone."""

from __future__ import annotations

import cv2
import numpy as np
import pytest

from servo_nodes.report import palette
from servo_nodes.report.overlay import encoded, overlay
from servo_nodes.values import State

SIZES = [(480, 640), (720, 1280), (240, 320)]


def _steel(shape, level=110):
    rng = np.random.default_rng(2)
    return rng.integers(level - 20, level + 20, shape, np.uint8)


def _near(picture, colour, centre, radius):
    """Return whether a colour is drawn within `radius` px of `centre` (x, y)."""
    x, y = (round(value) for value in centre)
    patch = picture[max(0, y - radius):y + radius + 1, max(0, x - radius):x + radius + 1]
    far = np.abs(patch.astype(int) - palette.bgr(colour)).max(axis=2)
    return bool((far < 40).any())


@pytest.mark.parametrize('size', SIZES)
@pytest.mark.parametrize('channels', [(), (3,)])
def test_an_image_comes_back_as_bgr_of_its_size_and_untouched_itself(size, channels):
    image = _steel((*size, *channels))
    before = image.copy()
    picture = overlay(image, state=State.SERVOING, points_px=[[100, 100]], goal_px=[[150, 120]])
    assert picture.shape == (*size, 3)
    np.testing.assert_array_equal(image, before)


@pytest.mark.parametrize('level', [25, 110, 230])
def test_dots_lie_on_the_points_and_diamonds_around_their_goals(level):
    now, goal = (200.0, 240.0), (420.0, 300.0)
    picture = overlay(_steel((480, 640), level), points_px=[now], goal_px=[goal])
    assert _near(picture, palette.NOW, now, 1)
    assert _near(picture, palette.GOAL, (goal[0] + 3, goal[1] + 3), 1)
    assert not _near(picture, palette.GOAL, goal, 2)
    assert _near(picture, palette.PAPER, (310, 270), 2)


def test_a_point_at_home_lies_inside_its_diamond():
    picture = overlay(_steel((480, 640)), points_px=[[300, 300]], goal_px=[[300, 300]])
    assert _near(picture, palette.NOW, (300, 300), 1)
    assert _near(picture, palette.GOAL, (303, 303), 1)


def test_nothing_known_is_nothing_drawn():
    image = _steel((480, 640, 3))
    np.testing.assert_array_equal(overlay(image), image)


def test_points_that_are_not_finite_or_far_outside_are_left_out_without_harm():
    image = _steel((480, 640, 3))
    points = [[np.nan, 100], [1e12, -1e12], [100, 100]]
    picture = overlay(image, points_px=points, goal_px=[[50, 50], [60, 60], [np.inf, 0]])
    assert not _near(picture, palette.NOW, (100, 100), 3)
    assert _near(picture, palette.GOAL, (63, 63), 1)


@pytest.mark.parametrize('state', list(State))
def test_each_state_has_its_colour_and_a_shape_of_its_own(state):
    shapes = {}
    for each in State:
        picture = overlay(np.zeros((480, 640), np.uint8), state=each)
        patch = picture[4:26, 6:28].astype(int)
        shapes[each] = np.abs(patch - palette.bgr(palette.STATES[each.value])).max(axis=2) > 60
        assert _near(picture, palette.STATES[each.value], (3, 15), 1)
    for other in State:
        same = np.mean(shapes[state] == shapes[other])
        assert same == 1 if other is state else same < 0.97


@pytest.mark.parametrize('size', SIZES)
def test_words_too_long_for_the_image_are_cut_not_run_out_of_it(size):
    text = 'no features for 0.131 s, at most 0.12 s allowed; check the tracker ' * 4
    picture = overlay(np.zeros(size, np.uint8), state=State.HOLDING, reason='features_silent',
                      text=text, error_px=12.3, points=(3, 120))
    unit = min(size[0] / 480, size[1] / 640)
    bright = picture.max(axis=2) > 150
    second_row = bright[round(31 * unit):round(50 * unit)]
    assert second_row.any()
    assert not second_row[:, -max(2, round(6 * unit)):].any()


def test_words_that_ascii_has_not_are_replaced_not_garbled():
    picture = overlay(np.zeros((480, 640), np.uint8), text='5° über Maß')
    assert picture[:30].max() > 150


def _gauge(share):
    """Return how many columns of the linear gauge are filled, and with which colour."""
    picture = overlay(np.zeros((480, 640), np.uint8), speed=(0.1 * share, 0.0), caps=(0.1, 0.5))
    row = picture[467, 300:465].astype(int)
    for colour in (palette.GOAL, palette.STATES['holding']):
        filled = int((np.abs(row - palette.bgr(colour)).max(axis=1) < 12).sum())
        if filled:
            return filled, colour
    return 0, None


def test_the_gauge_shows_the_share_of_the_cap_and_warns_at_the_cap():
    half, blue = _gauge(0.5)
    full, warning = _gauge(1.0)
    assert half == pytest.approx(full / 2, abs=3)
    assert (blue, warning) == (palette.GOAL, palette.STATES['holding'])
    assert _gauge(7.0) == (full, warning)
    assert _gauge(float('nan'))[0] == 0


def test_the_corners_of_the_taught_view_follow_the_homography():
    shift = np.array([[1, 0, 60], [0, 1, 40], [0, 0, 1.0]])
    picture = overlay(_steel((480, 640)), homography=shift)
    assert _near(picture, palette.GOAL, (60, 40), 1)
    assert not _near(picture, palette.GOAL, (200, 200), 9)


@pytest.mark.parametrize('matrix', [np.full((3, 3), np.nan), np.zeros((3, 3)),
                                    np.array([[1, 0, 0], [0, 1, 0], [0.01, 0, -1.0]])])
def test_a_homography_that_cannot_be_drawn_is_left_out(matrix):
    image = _steel((480, 640, 3))
    np.testing.assert_array_equal(overlay(image, homography=matrix), image)


@pytest.mark.parametrize('image', [np.zeros((4, 4)), np.zeros((4, 4, 4), np.uint8),
                                   np.zeros(4, np.uint8), np.zeros((4, 4), np.uint16)])
def test_other_images_are_refused_in_one_sentence(image):
    with pytest.raises(ValueError, match=r'image: expected uint8 of shape \(h, w\) or .*got'):
        overlay(image)


def test_points_without_their_goals_are_refused_in_one_sentence():
    with pytest.raises(ValueError, match=r'points_px: expected as many as goal_px \(2\), got 1'):
        overlay(_steel((48, 64)), points_px=[[1, 2]], goal_px=[[1, 2], [3, 4]])


def test_a_picture_for_the_page_is_a_light_jpeg_of_bounded_width():
    data = encoded(overlay(_steel((1080, 1920, 3))))
    pixels = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_COLOR)
    assert pixels.shape == (540, 960, 3)
    assert len(encoded(cv2.GaussianBlur(_steel((480, 640)), (0, 0), 2))) < 40_000
