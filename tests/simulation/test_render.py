# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where things land in a rendered image, how sharp they are, and how far away."""

from __future__ import annotations

import dataclasses

import cv2
import numpy as np
import pytest

from servo_nodes.camera import Camera
from servo_nodes.simulation import render
from servo_nodes.simulation.texture import Face, Texture
from tests.leaves.published_cameras import EUROC, FR1, KITTI, TUM_VI
from tests.simulation import rig

POSES = {'tilted': rig.facing(0.5, (0.35, -0.3, 0.4), (0.03, -0.02)),
         'near': rig.facing(0.25, (-0.2, 0.15, 0.5))}
LENSES = {'plumb_bob fr1': FR1, 'plumb_bob euroc': EUROC, 'equidistant': TUM_VI,
          'rational': Camera(640, 480, 520.0, 520.0, 320.0, 240.0, 'rational_polynomial',
                             (0.3, -0.1, 0.0005, -0.0003, 0.01, 0.5, 0.05, 0.0)),
          'pinhole': Camera(640, 480, 600.0, 610.0, 319.5, 239.5)}
COLUMNS, ROWS, SQUARE = 26, 20, 0.04


@pytest.fixture(scope='module')
def board():
    """Return an endless chessboard of 40 mm squares, drawn with 0.4 mm texels."""
    return rig.backdrop(rig.chequer(COLUMNS, ROWS, 100), COLUMNS * SQUARE)


def refined(image, corners):
    """Return the corners found near `corners` (N, 2) by OpenCV, by their edges.

    This is good to 0.1 px only, also on images that are the exact mean over each pixel's area.
    """
    start = corners.astype(np.float32).reshape(-1, 1, 2)
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_COUNT, 100, 1e-4)
    return cv2.cornerSubPix(image, start, (5, 5), (-1, -1), criteria).reshape(-1, 2)


# From farther away, squares are too small for the search under the widest lens.
@pytest.mark.parametrize('lens, pose', [(lens, pose) for lens in LENSES for pose in POSES
                                        if (lens, pose) != ('equidistant', 'tilted')])
def test_corners_of_the_scene_land_where_opencv_projects_them(board, lens, pose):
    camera, T_CF = LENSES[lens], POSES[pose]
    image = render.picture([rig.placed(board, T_CF)], camera, rig.GLOBAL, grey=True)
    corners = rig.inner_corners(COLUMNS, ROWS, SQUARE)
    uv = uv_of_wide_squares(corners, T_CF, camera)
    assert len(uv) >= 12
    off = refined(image, uv) - uv
    assert np.linalg.norm(off, axis=1).max() < 0.13
    assert np.sqrt((off ** 2).mean()) < 0.05
    assert np.abs(off.mean(axis=0)).max() < 0.01


def uv_of_wide_squares(corners, T_CF, camera):
    """Return pixels (N, 2) of corners well inside the image whose neighbours are far enough."""
    ahead = (corners @ T_CF[:3, :3].T + T_CF[:3, 3])[:, 2] > 0.1
    uv = rig.projected(corners[ahead], T_CF, camera)
    inside = ((uv > 18) & (uv < np.subtract(camera.size, 19))).all(axis=1)
    uv = uv[inside & np.isfinite(camera.normalised_from_pixels(uv)).all(axis=1)]
    apart = np.linalg.norm(uv[:, None] - uv[None], axis=-1) + 1e9 * np.eye(len(uv))
    return uv[apart.min(axis=1) > 18]


def test_the_first_texel_s_centre_is_the_origin_of_pixels_at_every_size():
    picture = rig.chequer(16, 12, 40)
    texture = Texture(picture, 0.64)
    camera = Camera(400, 300, 1000.0, 1000.0, 199.5, 149.5)
    shifts = []
    for distance in (0.5, 1.0, 1.4, 2.0, 3.1):
        T_CF = rig.facing(distance)
        face = Face(texture, np.eye(4), endless=True)
        image = render.picture([rig.placed(face, T_CF)], camera, rig.GLOBAL, grey=True)
        uv = rig.projected(rig.inner_corners(16, 12, 0.04), T_CF, camera)
        uv = uv[((uv > 18) & (uv < np.subtract(camera.size, 19))).all(axis=1)]
        shifts.append((refined(image, uv) - uv).mean(axis=0))
    assert np.abs(shifts).max() < 0.01


@pytest.mark.parametrize('distance', [0.2, 0.5, 1.1, 2.3, 4.0])
def test_fine_texture_neither_flickers_nor_blurs_away_with_distance(distance):
    # A smooth wave of 20 px per period must keep most of its contrast from any distance; one of
    # 0.9 px per period must be grey, whatever its phase.
    camera = Camera(160, 120, 500.0, 500.0, 79.5, 59.5)
    for period_px, low, high in ((20.0, 0.85, 1.0), (0.9, 0.0, 0.12)):
        period = period_px * distance / 500.0
        texels = np.arange(4000) * (0.4 * distance / 4000 * 2)
        wave = 127.5 + 100 * np.sin(2 * np.pi * texels / period)
        picture = np.tile(np.round(wave).astype(np.uint8), (64, 1))
        face = Face(Texture(picture, 0.8 * distance), np.eye(4), endless=True)
        image = render.picture([rig.placed(face, rig.facing(distance))], camera, rig.GLOBAL,
                               grey=True)
        contrast = image[60].astype(float).std() * np.sqrt(2) / 100
        assert low <= contrast <= high


@pytest.mark.parametrize('lens', LENSES)
def test_depth_is_that_of_the_plane_along_every_ray(board, lens):
    camera, T_CF = LENSES[lens], POSES['tilted']
    inverse = render.inverse_depths([rig.placed(board, T_CF)], camera)
    uv = np.stack(np.meshgrid(np.arange(camera.width), np.arange(camera.height)), axis=-1)
    rays = camera.normalised_from_pixels(uv.reshape(-1, 2)).reshape(*uv.shape[:2], 2)
    normal = T_CF[:3, 2]
    expected = (rays @ normal[:2] + normal[2]) / (normal @ T_CF[:3, 3])
    sure = np.isfinite(expected) & (expected > 0)
    assert sure.mean() > 0.5
    np.testing.assert_allclose(inverse[sure], expected[sure], rtol=1e-4, atol=1e-4)


FOLDED = dataclasses.replace(KITTI, width=160, height=60, fx=98.4, fy=98.1, cx=20.0, cy=30.0)


def test_pixels_without_a_ray_are_black_and_without_depth(board):
    # CHECKS CAM-H: seen wider, this lens folds back at r = 1.196684083.
    one = [rig.placed(board, rig.facing(0.4))]
    image = render.picture(one, FOLDED, rig.GLOBAL, grey=True)
    blind = render.rays_of(FOLDED).blind
    assert 50 < blind.sum() < 0.5 * blind.size
    assert not image[blind].any() and image[~blind].min() >= 55
    assert not render.inverse_depths(one, FOLDED)[blind].any()


def test_beyond_the_horizon_of_the_plane_there_is_nothing(board):
    camera = LENSES['pinhole']
    one = [rig.placed(board, rig.facing(0.4, (1.35, 0, 0)))]
    image = render.picture(one, camera, rig.GLOBAL, grey=True)
    behind = render.inverse_depths(one, camera) <= 0
    assert 0.1 < behind.mean() < 0.9
    assert not image[behind].any() and image[~behind].min() >= 55


def edge_columns(image, rows):
    """Return where a dark-to-bright edge crosses each row, px, by its level half way up."""
    found = []
    for row in rows:
        line = image[row].astype(float)
        level = (line[:20].mean() + line[-20:].mean()) / 2
        at = int(np.argmax(line > level))
        found.append(at - 1 + (level - line[at - 1]) / (line[at] - line[at - 1]))
    return np.array(found)


def half_dark():
    """Return a wide picture, dark left and bright right of its middle."""
    return rig.backdrop(np.repeat(np.array([[40] * 1000 + [220] * 1000], np.uint8), 64, 0), 2.0)


YAW = (0, 0, 0, 0, 0.5, 0)
RS_CAMERA = Camera(640, 480, 520.0, 520.0, 319.5, 239.5)


def test_a_rolling_shutter_shears_what_moves_by_its_row_times():
    # CHECKS RS: 16 ms over 480 rows, yaw 0.5 rad/s, f = 520: row 0 is exposed 7.98333 ms before
    # the middle and differs from it by 2.075666667 px. Content moves left, so it is further right.
    one = [rig.placed(half_dark(), rig.facing(1.0), YAW)]
    still = render.picture(one, RS_CAMERA, rig.GLOBAL, grey=True)
    rolling = render.picture(one, RS_CAMERA, render.Shutter(readout=0.016), grey=True)
    rows = np.array([0, 120, 239, 360, 479])
    shift = edge_columns(rolling, rows) - edge_columns(still, rows)
    np.testing.assert_allclose(shift, -260.0 * (rows - 239.5) * 0.016 / 480, atol=0.03)
    assert shift[0] == pytest.approx(2.075666667, abs=0.03)


def test_exposure_smears_what_moves_over_the_way_it_goes():
    # CHECKS RS: 10 ms at 260 px/s is 2.6 px; a box of that width has the variance 2.6^2 / 12.
    # A sharp edge looks wider or narrower as it lies to the pixels: take the mean over a pixel.
    shifts = np.arange(8) / 8 - 0.5
    variances = {}
    for shutter in (rig.GLOBAL, render.Shutter(exposure=0.01)):
        widths, middles = [], []
        for shift in shifts:
            T_CF = rig.facing(1.0, shift=(shift / 520.0, 0))
            image = render.picture([rig.placed(half_dark(), T_CF, YAW)], RS_CAMERA, shutter,
                                   grey=True)
            slope = np.diff(image[240].astype(float))[300:340]
            middles.append((slope * np.arange(40)).sum() / slope.sum())
            widths.append((slope * (np.arange(40) - middles[-1]) ** 2).sum() / slope.sum())
        variances[shutter] = np.mean(widths)
        # The stamp is the middle of the exposure: the edge itself does not move.
        np.testing.assert_allclose(np.array(middles) - shifts, 19.0, atol=0.05)
    smeared = variances[render.Shutter(exposure=0.01)] - variances[rig.GLOBAL]
    assert smeared == pytest.approx(2.6 ** 2 / 12, rel=0.06)


def test_what_stands_still_is_the_same_under_any_shutter(board):
    one = [rig.placed(board, POSES['tilted'])]
    still = render.picture(one, FR1, rig.GLOBAL, grey=True)
    other = render.picture(one, FR1, render.Shutter(exposure=0.02, readout=0.03), grey=True)
    # OpenCV 4 rounds where it samples to 1/32 px: the last bit of a coordinate may move an edge by
    # that much.
    difference = np.abs(still.astype(int) - other)
    assert difference.max() <= (1 if int(cv2.__version__.split('.')[0]) >= 5 else 255 // 32)
    assert difference.mean() < 0.01


def test_a_rolling_shutter_bends_the_nearer_face_more():
    near = Face(Texture(np.full((1000, 50), 250, np.uint8), 0.05), np.eye(4))
    dark = rig.backdrop(np.full((64, 64), 30, np.uint8), 1.0)
    sliding = (0.2, 0, 0, 0, 0, 0)
    scene = [rig.placed(dark, rig.facing(1.0), sliding),
             rig.placed(near, rig.facing(0.5), sliding)]
    image = render.picture(scene, RS_CAMERA, render.Shutter(readout=0.03), grey=True)
    # How much light there is left of the middle tells where the card's left edge lies.
    left = 319.5 - (image[[20, 460], :320].astype(float) - 30).sum(axis=1) / 220
    # 0.2 m/s at 0.5 m and f = 520 is 208 px/s, over 440 rows of 62.5 us: 5.72 px.
    assert left[0] - left[1] == pytest.approx(208 * 440 * 0.03 / 480, abs=0.05)


def two_faces(distance=0.3):
    """Return a bright card 0.1 m wide before a dark wall at 0.6 m, and their scene."""
    wall = rig.backdrop(np.full((64, 64), 50, np.uint8), 1.0)
    card = Face(Texture(np.full((100, 100), 210, np.uint8), 0.1), np.eye(4))
    return wall, card, [rig.placed(wall, rig.facing(0.6)), rig.placed(card, rig.facing(distance))]


def test_a_nearer_face_hides_what_is_behind_it_and_its_edges_are_exact():
    _, _, scene = two_faces()
    camera = LENSES['pinhole']
    image = render.picture(scene, camera, rig.GLOBAL, grey=True)
    depth = 1 / render.inverse_depths(scene, camera)
    # Half the card is 0.05 / 0.3 x 600 = 100 px wide: from 219.5 to 419.5.
    assert image[240, 222] == image[240, 417] == 210 and image[240, 216] == image[240, 422] == 50
    light = (image[240, 210:230].astype(float) - 50) / 160
    assert 229.5 - light.sum() == pytest.approx(219.5, abs=0.03)
    np.testing.assert_allclose(depth[240, [100, 320]], (0.6, 0.3), rtol=1e-5)


def test_the_order_in_which_faces_are_listed_does_not_matter():
    wall, card, scene = two_faces()
    farther = rig.placed(Face(Texture(np.full((50, 50), 120, np.uint8), 0.3), np.eye(4)),
                         rig.facing(0.5, (0.2, 0.1, 0)))
    camera = LENSES['pinhole']
    first = render.picture([scene[0], scene[1], farther], camera, rig.GLOBAL, grey=True)
    second = render.picture([scene[0], farther, scene[1]], camera, rig.GLOBAL, grey=True)
    np.testing.assert_array_equal(first, second)
    assert first[240, 320] == 210 and (first == 120).any()


def test_a_face_is_not_seen_from_its_back_nor_behind_the_camera():
    wall, card, scene = two_faces()
    camera = LENSES['pinhole']
    turned = rig.placed(card, rig.facing(0.3, (0, np.pi, 0)))
    behind = rig.placed(card, rig.facing(-0.3))
    image = render.picture([scene[0], turned, behind], camera, rig.GLOBAL, grey=True)
    assert (image == 50).all()


def test_points_are_hidden_exactly_where_the_picture_hides_them():
    _, _, scene = two_faces()
    camera = LENSES['pinhole']
    uv = np.stack(np.meshgrid(np.arange(5, 640, 9), np.arange(5, 480, 9)), axis=-1).reshape(-1, 2)
    rays = np.column_stack([camera.normalised_from_pixels(uv), np.ones(len(uv))])
    hidden = render.is_hidden(rays * 0.6, scene)
    depth = 1 / render.inverse_depths(scene, camera)
    np.testing.assert_array_equal(hidden, depth[uv[:, 1], uv[:, 0]] < 0.5)
    assert not render.is_hidden(rays * 0.3, scene).any()
    assert not render.is_hidden(rays * 0.2, scene).any()


def test_colour_and_grey_pictures_agree():
    rng = np.random.default_rng(3)
    picture = cv2.GaussianBlur(rng.integers(0, 256, (300, 400, 3), dtype=np.uint8), (0, 0), 3)
    one = [rig.placed(rig.backdrop(picture, 0.5), POSES['tilted'])]
    colour = render.picture(one, FR1, rig.GLOBAL, grey=False)
    grey = render.picture(one, FR1, rig.GLOBAL, grey=True)
    assert colour.shape == (480, 640, 3)
    expected = cv2.cvtColor(colour, cv2.COLOR_BGR2GRAY).astype(int)
    assert np.abs(expected - grey).max() <= 2



@pytest.mark.parametrize('pixels, width, words', [
    (np.zeros((4, 4), np.float32), 1.0, 'expected uint8'),
    (np.zeros((4, 4, 4), np.uint8), 1.0, r'got uint8 of shape \(4, 4, 4\)'),
    (np.zeros((4, 4), np.uint8), 0.0, 'width: expected a positive size in m, got 0.0')])
def test_a_texture_refuses_what_is_no_picture(pixels, width, words):
    with pytest.raises(ValueError, match=words):
        Texture(pixels, width)
