# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Which topic of a recording plays which part: found by type, then by name, or named."""

from __future__ import annotations

import typing
from collections.abc import Mapping

from servo_nodes.settings import nearest


class Part(typing.NamedTuple):
    """What a topic must be to play a part.

    Attributes
    ----------
    kind : str, its type
    endings : last words of the name, best first
    by_type : bool, the only topic of the type will do, whatever its name
    without : words that a name must not contain
    """

    kind: str
    endings: tuple[str, ...]
    by_type: bool = True
    without: tuple[str, ...] = ()


_DRAWN = ('overlay', 'depth', 'debug', 'mask')
PARTS = {
    'image': Part('sensor_msgs/msg/Image', ('image', 'image_raw', 'image_rect', 'image_mono',
                                            'image_color', 'image_rect_color'), without=_DRAWN),
    'compressed': Part('sensor_msgs/msg/CompressedImage', ('image/compressed',
                                                           'image_raw/compressed'),
                       without=_DRAWN),
    'depth': Part('sensor_msgs/msg/Image', ('depth', 'depth/image', 'depth/image_raw',
                                            'depth/image_rect_raw'), by_type=False),
    'camera_info': Part('sensor_msgs/msg/CameraInfo', ('camera_info',), without=('depth',)),
    'features': Part('sensor_msgs/msg/PointCloud2', ('features',)),
    'command': Part('geometry_msgs/msg/TwistStamped', ('camera_twist',)),
    'state': Part('diagnostic_msgs/msg/DiagnosticStatus', ('controller/state', 'state')),
    'halt': Part('std_msgs/msg/Bool', ('halt',), by_type=False),
    'heartbeat': Part('std_msgs/msg/Empty', ('heartbeat',), by_type=False),
    'clock': Part('rosgraph_msgs/msg/Clock', ('clock',)),
    'parameters': Part('rcl_interfaces/msg/ParameterEvent', ('parameter_events',)),
}


def topics_of_parts(kinds: Mapping[str, str], counts: Mapping[str, int],
                    named: Mapping[str, str]) -> dict[str, str]:
    """Return the topic of every part that somebody plays.

    Parameters
    ----------
    kinds, counts : type and number of messages of every topic
    named : topics that were named for a part; a leading slash more or less does not matter

    Raises
    ------
    ValueError
        For an unknown part or topic, a topic of another type, and where several would do.
    """
    found: dict[str, str] = {}
    for part, name in named.items():
        if part not in PARTS:
            near = nearest(part, PARTS)
            raise ValueError(f'topics: expected one of {", ".join(PARTS)}, got {part!r}'
                             + (f'; did you mean {near!r}?' if near else ''))
        found[part] = _named(part, name, kinds)
    for part, wanted in PARTS.items():
        if part in found or (part == 'compressed' and 'image' in found):
            continue
        topic = _chosen(part, wanted, kinds, counts, found)
        if topic is not None:
            found[part] = topic
    return found


def _named(part: str, name: str, kinds: Mapping[str, str]) -> str:
    for topic in kinds:
        if topic.lstrip('/') == name.lstrip('/'):
            if kinds[topic] != PARTS[part].kind:
                raise ValueError(f'topic {name} for {part}: expected {PARTS[part].kind}, '
                                 f'got {kinds[topic]}')
            return topic
    near = nearest(name, kinds)
    raise ValueError(f'topic {name} for {part}: expected a topic of the recording, got none'
                     + (f'; did you mean {near!r}?' if near else ''))


def _chosen(part: str, wanted: Part, kinds: Mapping[str, str], counts: Mapping[str, int],
            found: Mapping[str, str]) -> str | None:
    """Return the topic of a part: by name; else the only one of its type; None for nobody."""
    fitting = [topic for topic, kind in kinds.items() if kind == wanted.kind and counts[topic]
               and not any(word in topic for word in wanted.without)]
    if part == 'camera_info' and len(fitting) > 1:
        image = found.get('image', found.get('compressed', ''))
        siblings = [topic for topic in fitting if _base(topic) in (_base(image), _base(
            image.removesuffix('/compressed')))]
        fitting = siblings or fitting
    for ending in wanted.endings:
        ended = [topic for topic in fitting if f'/{topic}'.endswith(f'/{ending}')]
        if len(ended) > 1:
            raise ValueError(f'{part}: expected one topic of the recording, got '
                             f'{", ".join(ended)}; name it with --topics {part}={ended[0]}')
        if ended:
            return ended[0]
    if not wanted.by_type or not fitting:
        return None
    if len(fitting) > 1:
        raise ValueError(f'{part}: expected one topic of type {wanted.kind}, got '
                         f'{", ".join(fitting)}; name it with --topics {part}={fitting[0]}')
    return fitting[0]


def _base(topic: str) -> str:
    return topic.strip('/').rpartition('/')[0]
