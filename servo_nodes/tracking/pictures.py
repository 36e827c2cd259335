# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Pictures as cameras send them -> grey 8 bit and metres; refuses what cannot be one.

The names of the Bayer patterns differ: ROS names the first two pixels of the first row, OpenCV the
second and third of the second row, so `bayer_rggb8` is OpenCV's BayerBG.
"""

from __future__ import annotations

import typing

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.goal import png_size
from servo_nodes.values import Image, Stamp

Grey = npt.NDArray[np.uint8]
Metres = npt.NDArray[np.float32]

LEAST_SIDE_PX, MOST_SIDE_PX = 16, 8192
MOST_BYTES = 64 * 1024 * 1024
_CODES = {
    'bgr8': cv2.COLOR_BGR2GRAY, '8UC3': cv2.COLOR_BGR2GRAY, 'rgb8': cv2.COLOR_RGB2GRAY,
    'bgra8': cv2.COLOR_BGRA2GRAY, '8UC4': cv2.COLOR_BGRA2GRAY, 'rgba8': cv2.COLOR_RGBA2GRAY,
    'bayer_rggb8': cv2.COLOR_BayerBG2GRAY, 'bayer_bggr8': cv2.COLOR_BayerRG2GRAY,
    'bayer_gbrg8': cv2.COLOR_BayerGR2GRAY, 'bayer_grbg8': cv2.COLOR_BayerGB2GRAY}
_LUMINANCE = {'yuv422': 1, 'uyvy': 1, 'yuv422_yuy2': 0, 'yuyv': 0}


def grey_from_image(image: Image) -> Grey:
    """Return grey pixels (height, width), uint8, contiguous.

    Sixteen-bit pixels are shifted by the fewest whole bits that bring their brightest thousandth
    into eight: sensors of 10 or 12 bits use only the lower part of the word.

    Raises
    ------
    ValueError
        For an encoding that is no picture, or a size or shape that cannot be one.
    """
    pixels, encoding = image.array, image.encoding
    _check_size(pixels.shape)
    if encoding in ('mono8', '8UC1'):
        return _contiguous(_checked(pixels, np.uint8, 2, encoding))
    if encoding in ('mono16', '16UC1'):
        return _eight_bits(_checked(pixels, np.uint16, 2, encoding))
    if encoding in _LUMINANCE:
        return _contiguous(_checked(pixels, np.uint8, 3, encoding)[..., _LUMINANCE[encoding]])
    if encoding in _CODES:
        ndim = 2 if encoding.startswith('bayer') else 3
        source = _contiguous(_checked(pixels, np.uint8, ndim, encoding))
        return typing.cast(Grey, cv2.cvtColor(source, _CODES[encoding]))
    if encoding.startswith('bayer') and encoding[:-2] + '8' in _CODES:
        eight = _eight_bits(_checked(pixels, np.uint16, 2, encoding))
        return typing.cast(Grey, cv2.cvtColor(eight, _CODES[encoding[:-2] + '8']))
    known = ', '.join(['mono8', 'mono16', *_CODES, 'bayer_*16', *_LUMINANCE])
    raise ValueError(f'image encoding: expected one of {known}, got {encoding!r}')


def metres_from_depth(image: Image) -> Metres:
    """Return depths (height, width), float32, m, NaN in holes, of a 16UC1 (mm) or 32FC1 (m) image.

    Raises
    ------
    ValueError
        For another encoding or shape.
    """
    _check_size(image.array.shape)
    if image.encoding in ('16UC1', 'mono16'):
        raw = _checked(image.array, np.uint16, 2, image.encoding)
        metres = raw.astype(np.float32) * np.float32(1e-3)
    elif image.encoding == '32FC1':
        metres = _checked(image.array, np.float32, 2, image.encoding).astype(np.float32)
    else:
        raise ValueError('encoding: expected 16UC1 (mm) or 32FC1 (m), '
                         f'got {image.encoding!r}')
    with np.errstate(invalid='ignore'):
        metres[~((metres > 0) & (metres < 1e3))] = np.nan
    return typing.cast(Metres, metres)


def image_from_bytes(data: bytes | bytearray | memoryview, stamp: Stamp, frame_id: str) -> Image:
    """Return the image of a JPEG or PNG file's bytes, whose size is judged before it is unpacked.

    Raises
    ------
    ValueError
        For bytes that are too many, no picture, or one of a hostile size.
    """
    data = bytes(data)
    if not 0 < len(data) <= MOST_BYTES:
        raise ValueError(f'compressed image: expected 1 to {MOST_BYTES} bytes, got {len(data)}')
    size = png_size(data) or _jpeg_size(data)
    if size is None:
        raise ValueError('compressed image: expected JPEG or PNG, got something else')
    _check_size((size[1], size[0]))
    try:
        pixels: typing.Any = cv2.imdecode(np.frombuffer(data, np.uint8),
                              cv2.IMREAD_ANYDEPTH | cv2.IMREAD_ANYCOLOR)
    except cv2.error:
        pixels = None
    if pixels is None:
        raise ValueError(f'compressed image: expected a whole picture of {size[0]}x{size[1]} px, '
                         'got a damaged one')
    if pixels.ndim == 3:
        if pixels.dtype == np.uint16:
            pixels = (pixels >> 8).astype(np.uint8)
        return Image(pixels, 'bgr8', stamp, frame_id)
    return Image(pixels, 'mono16' if pixels.dtype == np.uint16 else 'mono8', stamp, frame_id)


def _jpeg_size(data: bytes) -> tuple[int, int] | None:
    """Return (width, height) from the first frame header of a JPEG (ITU-T T.81, B.2.2)."""
    if data[:2] != b'\xff\xd8':
        return None
    at = 2
    while at + 9 <= len(data):
        if data[at] != 0xFF:
            return None
        kind = data[at + 1]
        if 0xC0 <= kind <= 0xCF and kind not in (0xC4, 0xC8, 0xCC):
            return (int.from_bytes(data[at + 7:at + 9], 'big'),
                    int.from_bytes(data[at + 5:at + 7], 'big'))
        if kind == 0xFF:
            at += 1
        else:
            at += 2 + int.from_bytes(data[at + 2:at + 4], 'big')
    return None


def _check_size(shape: tuple[int, ...]) -> None:
    fits = len(shape) >= 2 and all(LEAST_SIDE_PX <= side <= MOST_SIDE_PX for side in shape[:2])
    if not fits:
        got = f'{shape[1]}x{shape[0]}' if len(shape) >= 2 else f'shape {shape}'
        raise ValueError(f'image size: expected {LEAST_SIDE_PX} to {MOST_SIDE_PX} px a side, '
                         f'got {got}')


def _checked(pixels: npt.NDArray[typing.Any], dtype: type, ndim: int,
             encoding: str) -> npt.NDArray[typing.Any]:
    """Return `pixels` in native byte order, or say what does not fit the encoding."""
    if pixels.dtype.newbyteorder('=') != np.dtype(dtype) or pixels.ndim != ndim:
        raise ValueError(f'image {encoding}: expected {np.dtype(dtype)} with {ndim} axes, '
                         f'got {pixels.dtype} of shape {pixels.shape}')
    return pixels if pixels.dtype.isnative else pixels.astype(dtype)


def _contiguous(pixels: npt.NDArray[typing.Any]) -> npt.NDArray[typing.Any]:
    return np.ascontiguousarray(pixels)


def _eight_bits(pixels: npt.NDArray[np.uint16]) -> Grey:
    sample = pixels[::4, ::4].ravel()
    at = int(0.999 * (sample.size - 1))
    shift = max(0, int(np.partition(sample, at)[at]).bit_length() - 8)
    eight: Grey = np.minimum(pixels >> shift, 255).astype(np.uint8)
    return eight
