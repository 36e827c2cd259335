# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Compressed images -> values, bounded before anything is unpacked."""

from __future__ import annotations

import typing

import cv2
import numpy as np

from servo_nodes import wire
from servo_nodes.values import Image

MOST_BYTES = 32 * 1024 * 1024


def image_from_compressed(message: typing.Any) -> Image:
    """Return the pixels of a sensor_msgs/CompressedImage that holds a JPEG or a PNG.

    Raises
    ------
    ValueError
        For anything else, and for sizes beyond those of raw images.
    """
    data = np.frombuffer(message.data, np.uint8)
    if not 0 < data.size <= MOST_BYTES:
        raise ValueError(f'image/compressed: expected 1 to {MOST_BYTES} bytes, got {data.size}')
    width, height = _size(bytes(message.data[:65536]))
    if not (1 <= width <= wire.MAX_IMAGE_SIDE and 1 <= height <= wire.MAX_IMAGE_SIDE
            and width * height <= wire.MAX_IMAGE_BYTES // 3):
        raise ValueError(f'image/compressed: expected 1 to {wire.MAX_IMAGE_SIDE} px a side and at '
                         f'most {wire.MAX_IMAGE_BYTES} bytes unpacked, got {width}x{height} px')
    try:
        pixels = cv2.imdecode(data, cv2.IMREAD_UNCHANGED)
    except cv2.error:
        pixels = None
    if pixels is None or pixels.dtype not in (np.uint8, np.uint16):
        raise ValueError('image/compressed: expected a JPEG or a PNG, got a damaged one')
    channels = 1 if pixels.ndim == 2 else pixels.shape[2]
    encoding = {(1, 1): 'mono8', (1, 2): 'mono16', (3, 1): 'bgr8', (4, 1): 'bgra8'}.get(
        (channels, pixels.dtype.itemsize))
    if encoding is None:
        raise ValueError('image/compressed: expected 8 bit colour or grey, got '
                         f'{channels} channels of {pixels.dtype}')
    return Image(pixels, encoding, wire.stamp_from_time(message.header.stamp),
                 str(message.header.frame_id))


def _size(head: bytes) -> tuple[int, int]:
    """Return (width, height), px, as the head announces; refuse what is neither JPEG nor PNG."""
    if head.startswith(b'\x89PNG\r\n\x1a\n') and len(head) >= 24:
        return int.from_bytes(head[16:20], 'big'), int.from_bytes(head[20:24], 'big')
    if head.startswith(b'\xff\xd8'):
        at = 2
        while at + 9 <= len(head) and head[at] == 0xFF:
            marker = head[at + 1]
            if 0xC0 <= marker <= 0xCF and marker not in (0xC4, 0xC8, 0xCC):
                return (int.from_bytes(head[at + 7:at + 9], 'big'),
                        int.from_bytes(head[at + 5:at + 7], 'big'))
            at += 2 + int.from_bytes(head[at + 2:at + 4], 'big')
    raise ValueError('image/compressed: expected a JPEG or a PNG, got something else')
