# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The camera against OpenCV and against published calibrations.

The numbers named CAM-* were computed with SciPy's root finding on the models' definitions, with
`cv2.undistortPoints` at 500 iterations and with `cv2.fisheye`; calibrations are those of the
public TUM RGB-D, KITTI, EuRoC and TUM-VI data sets.
"""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from published_cameras import CAMERAS, EUROC, FACTORY, FR1, KITTI, PINHOLE, TUM_VI

from servo_nodes.camera import Camera

KNOWN = [
    ('fr1', (100, 80), (-0.4126994873, -0.3294293818)),
    ('fr1', (500, 400), (0.3425220839, 0.2750592567)),
    ('fr1', (10, 10), (-0.5714026826, -0.4511167178)),
    ('kitti', (100, 80), (-0.7114052333, -0.1865575761)),
    ('kitti', (700, 250), (0.01015997882, 0.01713196381)),
    ('kitti', (1380, 500), (0.9047477041, 0.3490183314)),
    ('euroc', (20, 20), (-1.021507747, -0.6742431115)),
    ('euroc', (367, 240), (-0.0004688167919, -0.01831611488)),
    ('euroc', (740, 470), (1.108048481, 0.6602886121)),
    ('tum_vi', (30, 256), (-2.400197724, -0.009576678886)),
    ('tum_vi', (256, 256), (0.005593890813, -0.004699393406)),
    ('tum_vi', (400, 90), (1.489650873, -1.713852459)),
    ('factory', (20, 30), (-0.5407273691, -0.4845972186)),
    ('factory', (125, 130), (-0.009501928547, 0.02112904226)),
    ('factory', (230, 60), (0.515334357, -0.3293441116)),
]


def projected_by_opencv(camera: Camera, points_C):
    """Return pixels (N, 2) of points (N, 3) as OpenCV projects them."""
    points, zero = np.asarray(points_C, dtype=np.float64).reshape(-1, 1, 3), np.zeros(3)
    d = np.array(camera.distortion or (0.,) * 4)
    if camera.model == 'equidistant':
        pixels, _ = cv2.fisheye.projectPoints(points, zero, zero, camera.matrix, d)
    else:
        pixels, _ = cv2.projectPoints(points, zero, zero, camera.matrix, d)
    return np.asarray(pixels).reshape(-1, 2)


@pytest.mark.parametrize(('name', 'pixel', 'ray'), KNOWN)
def test_published_calibrations_give_the_known_rays(name, pixel, ray):
    """CAM-A to CAM-E."""
    camera = CAMERAS[name]
    assert_allclose(camera.normalised_from_pixels(pixel), ray, rtol=0, atol=1e-8)
    assert_allclose(camera.pixels_from_normalised(ray), pixel, rtol=0, atol=1e-6)


def test_the_library_default_would_be_pixels_off_where_ours_is_not():
    """CAM-B: cv2.undistortPoints stops after five rounds, 2.358 px off in this corner."""
    pixel = np.array([[[1380.0, 500.0]]])
    default = np.asarray(cv2.undistortPoints(
        pixel, KITTI.matrix, np.array(KITTI.distortion))).reshape(2)
    ours = KITTI.normalised_from_pixels(pixel[0, 0])
    off = np.linalg.norm((default - ours) * (KITTI.fx, KITTI.fy))
    assert_allclose(off, 2.358, rtol=0.05)
    assert np.linalg.norm(KITTI.pixels_from_normalised(ours) - pixel[0, 0]) < 1e-6


@pytest.mark.parametrize('name', CAMERAS)
def test_projection_agrees_with_opencv(name):
    camera = CAMERAS[name]
    rng = np.random.default_rng(5)
    reach = {'factory': 0.45, 'tum_vi': 3.0}.get(name, 0.6)
    points = np.column_stack([rng.uniform(-reach, reach, (200, 2)), np.ones(200)])
    points *= rng.uniform(0.2, 4.0, (200, 1))
    assert_allclose(camera.pixels_from_points(points), projected_by_opencv(camera, points),
                    rtol=0, atol=1e-6)


@pytest.mark.parametrize('name', CAMERAS)
def test_every_pixel_comes_back_or_is_nan(name):
    """The round trip closes to 1e-6 px wherever a ray is given at all."""
    camera = CAMERAS[name]
    u, v = np.meshgrid(np.linspace(0, camera.width - 1, 41), np.linspace(0, camera.height - 1, 31))
    pixels = np.stack([u, v], axis=-1)
    rays = camera.normalised_from_pixels(pixels)
    known = np.isfinite(rays).all(-1)
    assert_allclose(camera.pixels_from_normalised(rays)[known], pixels[known], rtol=0, atol=1e-6)
    least = {'factory': 0.85, 'tum_vi': 0.75}.get(name, 1.0)
    assert known.mean() >= least


@given(st.sampled_from(sorted(CAMERAS)), st.floats(-0.4, 0.4), st.floats(-0.4, 0.4))
def test_rays_come_back_from_their_pixels(name, x, y):
    camera = CAMERAS[name]
    back = camera.normalised_from_pixels(camera.pixels_from_normalised((x, y)))
    assert_allclose(back, (x, y), rtol=0, atol=1e-8)


@pytest.mark.parametrize('name', CAMERAS)
def test_pixels_and_jacobian_at_once_are_those_one_by_one(name):
    camera = CAMERAS[name]
    rays = np.random.default_rng(3).uniform(-0.4, 0.4, (50, 2))
    pixels, jacobian = camera.pixels_and_jacobian(rays)
    assert_allclose(pixels, camera.pixels_from_normalised(rays), rtol=0, atol=1e-9)
    assert_allclose(jacobian, camera.pixel_jacobian(rays), rtol=0, atol=1e-9)


def test_no_ray_is_given_beyond_the_fold():
    """CAM-H: KITTI's radial model turns back at r = 1.196684083, EuRoC's never does."""
    assert_allclose(KITTI.fold_radius, 1.196684083, rtol=1e-8)
    assert EUROC.fold_radius == np.inf
    assert PINHOLE.fold_radius == np.inf
    inside, edge, outside = 1.15, 1.1966, 1.25
    turn = np.array([np.cos(0.3), np.sin(0.3)])
    pixels = KITTI.pixels_from_normalised([inside * turn, edge * turn, outside * turn])
    rays = KITTI.normalised_from_pixels(pixels)
    assert_allclose(rays[0], inside * turn, atol=1e-6)
    # A pixel that a ray beyond the fold would reach is also reached from inside, or by none.
    finite = rays[np.isfinite(rays).all(-1)]
    assert (np.linalg.norm(finite, axis=-1) < KITTI.fold_radius).all()
    far = KITTI.pixels_from_normalised(1.19668 * turn) - (KITTI.cx, KITTI.cy)
    assert np.isnan(KITTI.normalised_from_pixels(far * 1.05 + (KITTI.cx, KITTI.cy))).all()


def test_no_ray_is_given_near_the_pole_of_a_rational_model():
    """CAM-J: the factory's denominator vanishes at r = 0.6736305143, inside the image."""
    pole = 0.6736305143
    for radius in (pole - 1e-6, pole, pole + 1e-6):
        pixel = FACTORY.pixels_from_normalised((radius, 0.0))
        ray = FACTORY.normalised_from_pixels(pixel)
        assert np.isnan(ray).all()
    rays = FACTORY.normalised_from_pixels(
        np.stack(np.meshgrid(np.arange(250.), np.arange(250.)), axis=-1))
    known = np.isfinite(rays).all(-1)
    assert np.nanmax(np.linalg.norm(rays, axis=-1)) < 1.0
    assert known[125, 125] and known[30, 20]


def test_a_fisheye_bends_rays_even_with_zero_coefficients():
    """theta_d = theta, as cv2.fisheye has it: an equidistant lens is no pinhole."""
    ideal = Camera(512, 512, 200., 200., 256., 256., 'equidistant', (0., 0., 0., 0.))
    points = np.array([[1.0, 0.5, 1.0], [0.1, -0.2, 1.0], [0.0, 0.0, 1.0]])
    assert_allclose(ideal.pixels_from_points(points), projected_by_opencv(ideal, points),
                    atol=1e-9)
    assert_allclose(ideal.normalised_from_pixels(ideal.pixels_from_points(points)),
                    points[:, :2], atol=1e-8)
    assert not ideal.is_pinhole
    assert Camera(512, 512, 200., 200., 256., 256., 'equidistant').is_pinhole


@pytest.mark.parametrize('radius', [0.0, 1e-9, 0.99e-4, 1.01e-4, 1e-2])
def test_the_fisheye_is_smooth_at_its_axis(radius):
    """Both sides of the series branch, against cv2.fisheye."""
    points = np.array([[radius * 0.6, radius * 0.8, 1.0]])
    assert_allclose(TUM_VI.pixels_from_points(points), projected_by_opencv(TUM_VI, points),
                    rtol=0, atol=1e-9)


@pytest.mark.parametrize('name', CAMERAS)
def test_pixel_jacobian_agrees_with_finite_differences(name):
    camera = CAMERAS[name]
    rng = np.random.default_rng(11)
    rays = np.concatenate([rng.uniform(-0.4, 0.4, (30, 2)), [[0.0, 0.0], [1e-6, 0.0]]])
    h = 1e-6
    columns = [(camera.pixels_from_normalised(rays + step)
                - camera.pixels_from_normalised(rays - step)) / (2 * h)
               for step in (np.array([h, 0]), np.array([0, h]))]
    assert_allclose(camera.pixel_jacobian(rays), np.stack(columns, axis=-1), rtol=1e-6, atol=1e-4)


def test_pixels_of_a_moving_camera():
    """IM-F and IM-G: pixels of one point without and with the distortion of TUM fr1 (OpenCV)."""
    rotation, _ = cv2.Rodrigues(np.array([0.2, -0.3, 0.1]))
    point = rotation @ (0.1, 0.05, 0.02) + (0.05, -0.1, 0.8)
    assert_allclose(point[2], 0.8580353712, atol=1e-9)
    plain = Camera(640, 480, 517.3, 516.5, 318.6, 255.3)
    assert_allclose(plain.pixels_from_points(point), (398.8011248, 226.0231293), atol=1e-6)
    assert_allclose(FR1.pixels_from_points(point), (399.4701229, 225.7162928), atol=1e-6)


def test_points_behind_the_camera_have_no_pixel():
    points = np.array([[0.1, 0.1, -1.0], [0.1, 0.1, 0.0], [0.1, 0.1, np.nan], [0.1, 0.1, 1.0]])
    pixels = PINHOLE.pixels_from_points(points)
    assert np.isnan(pixels[:3]).all()
    assert np.isfinite(pixels[3]).all()


@pytest.mark.parametrize('shape', [(2,), (0, 2), (1, 2), (3, 4, 2)])
@pytest.mark.parametrize('name', CAMERAS)
def test_shapes_are_kept(name, shape):
    camera = CAMERAS[name]
    assert camera.normalised_from_pixels(np.full(shape, 120.0)).shape == shape
    assert camera.pixels_from_normalised(np.zeros(shape)).shape == shape
    assert camera.pixel_jacobian(np.zeros(shape)).shape == (*shape, 2)
