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

from servo_nodes.camera import MAX_SIDE_PX, Camera
from servo_nodes.values import Calibration

FR1 = Camera(640, 480, 517.3, 516.5, 318.6, 255.3, 'plumb_bob',
             (0.2624, -0.9531, -0.0054, 0.0026, 1.1633))
FR2 = Camera(640, 480, 520.9, 521.0, 325.1, 249.7, 'plumb_bob',
             (0.2312, -0.7849, -0.0033, -0.0001, 0.9172))
KITTI = Camera(1392, 512, 984.2439, 980.8141, 690.0, 233.1966, 'plumb_bob',
               (-0.3728755, 0.2037299, 0.002219027, 0.001383707, -0.07233722))
EUROC = Camera(752, 480, 458.654, 457.296, 367.215, 248.375, 'plumb_bob',
               (-0.28340811, 0.07395907, 0.00019359, 1.76187114e-05))
TUM_VI = Camera(512, 512, 190.97847715128717, 190.9733070521226, 254.93170605935475,
                256.8974428996504, 'equidistant',
                (0.0034823894022493434, 0.0007150348452162257, -0.0020532361418706202,
                 0.00020293673591811182))
FACTORY = Camera(250, 250, 196.50531005859375, 196.50531005859375, 126.86713409423828,
                 125.84786987304688, 'rational_polynomial',
                 (-4.860828876495361, 17.2819766998291, 0.00020376102474983782,
                  0.0010251018684357405, -25.172250747680664, -4.943647384643555,
                  17.51442527770996, -25.290760040283203))
PINHOLE = Camera(640, 480, 500.0, 510.0, 319.5, 239.5)
CAMERAS = {'fr1': FR1, 'fr2': FR2, 'kitti': KITTI, 'euroc': EUROC, 'tum_vi': TUM_VI,
           'factory': FACTORY, 'pinhole': PINHOLE}

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


def calibration(camera: Camera, **changes) -> Calibration:
    """Return the CameraInfo content of a camera, with changes."""
    k = (camera.fx, 0., camera.cx, 0., camera.fy, camera.cy, 0., 0., 1.)
    values = {'frame_id': 'eye', 'width': camera.width, 'height': camera.height,
              'model': camera.model, 'd': camera.distortion, 'k': k,
              'p': (*k[:3], 0., *k[3:6], 0., *k[6:], 0.)}
    return Calibration(**{**values, **changes})


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


def test_region_and_binning_shift_and_scale_the_intrinsics():
    """CAM-G: region at (120, 60), binning 2 x 2, intrinsics of TUM fr1."""
    camera = Camera.from_calibration(calibration(
        FR1, d=(), binning=(2, 2), roi=(120, 60, 400, 300)))
    assert camera.size == (200, 150)
    assert_allclose((camera.fx, camera.fy, camera.cx, camera.cy), (258.65, 258.25, 99.3, 97.65))
    assert_allclose(camera.normalised_from_pixels((51, 33)), (-0.1867388363, -0.250338819),
                    atol=1e-9)
    full = Camera.from_calibration(calibration(FR1, d=()))
    assert_allclose(full.normalised_from_pixels((222, 126)),
                    camera.normalised_from_pixels((51, 33)), atol=1e-12)


def test_zero_binning_and_an_empty_region_mean_everything():
    assert Camera.from_calibration(calibration(FR1)).size == (640, 480)
    assert Camera.from_calibration(calibration(FR1, binning=(1, 1))) == Camera.from_calibration(
        calibration(FR1))


def test_rectified_images_of_a_real_rig():
    """CAM-F: KITTI's raw pixels to its rectified ones (cv2, SciPy); 1e-4 px."""
    rotation = np.array([[0.9999239, 0.009837760, -0.007445048],
                         [-0.009869795, 0.9999421, -0.004278459],
                         [0.007402527, 0.004351614, 0.9999631]])
    rectified = Camera.from_calibration(
        calibration(KITTI, p=(721.5377, 0, 609.5593, 0, 0, 721.5377, 172.8540, 0, 0, 0, 1, 0)),
        rectified=True)
    assert rectified.distortion == ()
    rays = KITTI.normalised_from_pixels([(200, 100), (690, 233), (1300, 450)])
    points = np.column_stack([rays, np.ones(3)]) @ rotation.T
    assert_allclose(rectified.pixels_from_points(points),
                    [(198.5574232, 62.89903742), (604.1857914, 169.6221875),
                     (1138.793604, 353.604398)], rtol=0, atol=1e-4)


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


def test_drivers_that_pad_or_omit_coefficients_are_understood():
    padded = Camera.from_calibration(calibration(EUROC, d=(*EUROC.distortion, 0., 0., 0., 0.)))
    assert_allclose(padded.normalised_from_pixels((20, 20)), (-1.021507747, -0.6742431115),
                    atol=1e-8)
    none = Camera.from_calibration(calibration(EUROC, d=()))
    assert none.is_pinhole
    unnamed = Camera.from_calibration(calibration(EUROC, model=''))
    assert unnamed.model == 'plumb_bob'


REFUSED = [
    (calibration(FR1, k=(0.,) * 9), r'k\[0\] = 0 means uncalibrated'),
    (calibration(FR1, k=(1.,) * 4), 'k: expected 9 numbers, got 4'),
    (calibration(FR1, k=(np.nan, 0, 1, 0, 1, 1, 0, 0, 1)), 'calibration: expected finite numbers'),
    (calibration(FR1, k=(500., 0, 1, 0, -500., 1, 0, 0, 1)), 'expected a positive focal length'),
    (calibration(FR1, d=(0.1, np.inf, 0, 0, 0)), 'calibration: expected finite numbers'),
    (calibration(FR1, d=(0.1, 0.2)), 'd: expected 0 or 4 or 5 numbers for plumb_bob, got 2'),
    (calibration(FR1, d=(0.1,) * 8), 'd: expected 0 or 4 or 5 numbers for plumb_bob, got 8'),
    (calibration(FR1, model='rational_polynomial'), 'd: expected 0 or 8 numbers'),
    (calibration(FR1, model='thin_prism'), 'distortion_model: expected one of plumb_bob, .* got'),
    (calibration(FR1, width=0), f'camera size: expected 1 to {MAX_SIDE_PX} px a side, got 0x4'),
    (calibration(FR1, height=10 ** 6), 'camera size: expected 1 to'),
    (calibration(FR1, roi=(600, 0, 100, 100)), 'roi: expected a region inside 640x480 px, got'),
    (calibration(FR1, roi=(0, 470, 0, 0)), 'roi: expected a region inside 640x480 px, got'),
]


@pytest.mark.parametrize(('given_calibration', 'sentence'), REFUSED)
def test_an_unusable_calibration_is_refused_in_one_sentence(given_calibration, sentence):
    with pytest.raises(ValueError, match=sentence):
        Camera.from_calibration(given_calibration)


def test_rectified_images_need_the_projection():
    with pytest.raises(ValueError, match='p: expected 12 numbers, got 0'):
        Camera.from_calibration(calibration(FR1, p=()), rectified=True)
    with pytest.raises(ValueError, match='expected a positive focal length'):
        Camera.from_calibration(calibration(FR1, p=(0.,) * 12), rectified=True)


def test_the_matrix_cannot_be_changed():
    with pytest.raises(ValueError, match='read-only'):
        FR1.matrix[0, 0] = 1.0
