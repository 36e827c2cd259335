# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Every encoding a camera may send becomes the same grey; what is no picture is refused."""

from __future__ import annotations

import re

import cv2
import numpy as np
import pytest

from servo_nodes.tracking.pictures import grey_from_image, image_from_bytes, metres_from_depth
from servo_nodes.values import Image

COLOUR = cv2.GaussianBlur(
    np.random.default_rng(0).integers(0, 255, (48, 64, 3), dtype=np.uint8), (0, 0), 3)
GREY = cv2.cvtColor(COLOUR, cv2.COLOR_BGR2GRAY)


def _image(array: np.ndarray, encoding: str) -> Image:
    return Image(array, encoding, 7, 'camera')


@pytest.mark.parametrize(('encoding', 'array'), [
    ('mono8', GREY), ('8UC1', GREY), ('bgr8', COLOUR), ('8UC3', COLOUR),
    ('rgb8', COLOUR[..., ::-1]), ('bgra8', np.dstack([COLOUR, GREY])),
    ('8UC4', np.dstack([COLOUR, GREY])), ('rgba8', np.dstack([COLOUR[..., ::-1], GREY])),
    ('mono16', GREY.astype(np.uint16) << 8), ('mono16', GREY.astype('>u2') << 4),
    ('16UC1', GREY.astype(np.uint16)),
    ('yuyv', np.dstack([GREY, np.full_like(GREY, 128)])),
    ('yuv422_yuy2', np.dstack([GREY, np.full_like(GREY, 128)])),
    ('uyvy', np.dstack([np.full_like(GREY, 128), GREY])),
    ('yuv422', np.dstack([np.full_like(GREY, 128), GREY])),
])
def test_encodings_agree_on_the_grey(encoding: str, array: np.ndarray) -> None:
    grey = grey_from_image(_image(array, encoding))
    assert grey.dtype == np.uint8
    assert grey.flags.c_contiguous
    # Sixteen bits are shifted by whole bits: the picture may come out twice as bright.
    scale = max(1.0, float(np.median(grey / np.maximum(GREY, 1.0))))
    assert np.abs(grey / round(scale) - GREY.astype(float)).max() <= 1.0


@pytest.mark.parametrize('order', ['rggb', 'bggr', 'gbrg', 'grbg'])
@pytest.mark.parametrize('bits', [8, 16])
def test_bayer_patterns_are_named_by_the_first_two_rows(order: str, bits: int) -> None:
    channel = {'b': 0, 'g': 1, 'r': 2}
    mosaic = np.empty(GREY.shape, np.uint8)
    for place, colour in enumerate(order):
        row, column = divmod(place, 2)
        mosaic[row::2, column::2] = COLOUR[row::2, column::2, channel[colour]]
    array = mosaic if bits == 8 else mosaic.astype(np.uint16) << 8
    grey = grey_from_image(_image(array, f'bayer_{order}{bits}'))
    error = np.abs(grey.astype(float) - GREY)[2:-2, 2:-2]
    assert np.median(error) < 2.5


def test_padded_rows_are_read_without_their_padding() -> None:
    padded = np.zeros((48, 80), np.uint8)
    padded[:, :64] = GREY
    assert np.array_equal(grey_from_image(_image(padded[:, :64], 'mono8')), GREY)


@pytest.mark.parametrize(('array', 'encoding', 'words'), [
    (GREY, '32FC1', "image encoding: expected one of mono8, .*, got '32FC1'"),
    (GREY, 'jpeg', 'image encoding: expected one of'),
    (GREY, 'bgr8', 'image bgr8: expected uint8 with 3 axes, got uint8 of shape'),
    (GREY.astype(float), 'mono8', 'image mono8: expected uint8'),
    (np.zeros((0, 0), np.uint8), 'mono8', 'image size: expected 16 to 8192 px a side, got 0x0'),
    (np.zeros((4, 640), np.uint8), 'mono8', 'image size: .* got 640x4'),
    (np.broadcast_to(np.uint8(0), (20000, 20000)), 'mono8', 'image size: .* got 20000x20000'),
])
def test_what_is_no_picture_is_refused_in_one_sentence(array: np.ndarray, encoding: str,
                                                       words: str) -> None:
    with pytest.raises(ValueError, match=words):
        grey_from_image(_image(array, encoding))


@pytest.mark.parametrize('suffix', ['.png', '.jpg'])
@pytest.mark.parametrize('picture', [GREY, COLOUR], ids=['grey', 'colour'])
def test_a_compressed_picture_is_unpacked(suffix: str, picture: np.ndarray) -> None:
    data = cv2.imencode(suffix, picture)[1].tobytes()
    image = image_from_bytes(data, 9, 'hand')
    assert (image.stamp, image.frame_id) == (9, 'hand')
    assert image.encoding == ('mono8' if picture.ndim == 2 else 'bgr8')
    assert np.abs(grey_from_image(image).astype(float) - GREY).mean() < 3


def test_a_compressed_picture_of_sixteen_bits_keeps_them() -> None:
    deep = GREY.astype(np.uint16) * 16
    image = image_from_bytes(cv2.imencode('.png', deep)[1].tobytes(), 0, '')
    assert image.encoding == 'mono16'
    assert np.array_equal(image.array, deep)


def _announcing(data: bytes, at: int, size: int) -> bytes:
    return data[:at] + size.to_bytes(4, 'big') * 2 + data[at + 8:]


@pytest.mark.parametrize(('data', 'words'), [
    (b'', 'expected 1 to 67108864 bytes, got 0'),
    (b'BM' + bytes(100), 'expected JPEG or PNG, got something else'),
    (_announcing(cv2.imencode('.png', GREY)[1].tobytes(), 16, 50000), 'got 50000x50000'),
    (cv2.imencode('.png', GREY)[1].tobytes()[:90], 'expected a whole picture of 64x48 px'),
    (b'\xff\xd8\xff', 'expected JPEG or PNG'),
    (b'\xff\xd8\xff\xc0\x00\x11\x08\xff\xff\xff\xff\x03', 'image size: .* got 65535x65535'),
])
def test_hostile_bytes_are_refused_before_they_are_unpacked(data: bytes, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        image_from_bytes(data, 0, '')


def test_depth_comes_in_metres_with_holes_as_nan() -> None:
    raw = np.full((20, 20), 421, np.uint16)
    raw[2, 3] = 0
    metres = metres_from_depth(_image(raw, '16UC1'))
    assert metres[0, 0] == pytest.approx(0.421)
    assert np.isnan(metres[2, 3])
    floats = np.full((20, 20), 0.421, np.float32)
    floats[0, :4] = [np.nan, np.inf, -1.0, 0.0]
    metres = metres_from_depth(_image(floats, '32FC1'))
    assert np.isnan(metres[0, :4]).all()
    assert metres[1, 0] == np.float32(0.421)
    with pytest.raises(ValueError, match=re.escape('encoding: expected 16UC1 (mm)')):
        metres_from_depth(_image(GREY, 'mono8'))
