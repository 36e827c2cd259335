# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where topics are looked for that belong to an image: beside it, unless they were remapped."""

from __future__ import annotations

import typing
from collections.abc import Callable


def camera_info_name(node: typing.Any) -> str:
    """Return the topic of the calibration: beside the image, unless it was remapped itself."""
    return _beside_image(node, 'camera_info',
                         lambda image: f'{image.rsplit("/", 1)[0]}/camera_info')


def compressed_name(node: typing.Any) -> str:
    """Return the topic of the compressed image: below the image, unless it was remapped itself."""
    return _beside_image(node, 'image/compressed', lambda image: f'{image}/compressed')


def _beside_image(node: typing.Any, name: str, derived: Callable[[str], str]) -> str:
    if node.resolve_topic_name(name) != node.resolve_topic_name(name, only_expand=True):
        return name
    image = node.resolve_topic_name('image')
    return name if image == node.resolve_topic_name('image', only_expand=True) else derived(image)
