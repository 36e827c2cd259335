# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The camera out of a CameraInfo: what it means (REP 104) and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from published_cameras import EUROC, FR1, KITTI

from servo_nodes.camera import MAX_SIDE_PX, Camera
from servo_nodes.values import Calibration


def calibration(camera: Camera, **changes) -> Calibration:
    """Return the CameraInfo content of a camera, with changes."""
    k = (camera.fx, 0., camera.cx, 0., camera.fy, camera.cy, 0., 0., 1.)
    values = {'frame_id': 'eye', 'width': camera.width, 'height': camera.height,
              'model': camera.model, 'd': camera.distortion, 'k': k,
              'p': (*k[:3], 0., *k[3:6], 0., *k[6:], 0.)}
    return Calibration(**{**values, **changes})


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
