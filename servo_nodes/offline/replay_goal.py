# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where the goal of a replay comes from: a folder, the recording itself, or nowhere."""

from __future__ import annotations

import math
import pathlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from servo_nodes import goal, wire
from servo_nodes.offline.bags import Bag, Message
from servo_nodes.offline.replay_settings import Choice
from servo_nodes.offline.replay_time import Decoder
from servo_nodes.offline.verdict import Thresholds
from servo_nodes.tracking.pictures import image_from_bytes
from servo_nodes.tracking.tracker import Tracker
from servo_nodes.values import SECOND_NS, Image


@dataclass(frozen=True)
class Request:
    """What is to be replayed, and how.

    Attributes
    ----------
    goal : folder of the taught view, or None
    teach : '' or where in the recording the view is taught: `first`, `last`, or seconds
    params : parameter files
    topics : topics named for a part
    """

    goal: pathlib.Path | None = None
    teach: str = ''
    params: Sequence[pathlib.Path] = ()
    topics: Mapping[str, str] = field(default_factory=dict)
    thresholds: Thresholds = field(default_factory=Thresholds)
    seed: int = 0


def tracker_for(bag: Bag, parts: Mapping[str, str], request: Request, choice: Choice,
                notes: list[str]) -> Tracker | None:
    """Return a tracker that has its goal, or None when the recorded features are to be used.

    Raises
    ------
    ValueError
        One sentence, when there is neither, or the goal is unusable.
    """
    images = 'image' in parts or 'compressed' in parts
    wanted = request.goal is not None or bool(request.teach)
    if wanted and not images:
        raise ValueError(f'{bag.path}: expected images to track, got none; without --goal and '
                         '--teach the recorded features are used')
    folder = request.goal
    if not wanted and 'features' not in parts:
        if not images:
            raise ValueError(f'{bag.path}: expected a topic with features or images, got '
                             f'{_topics_in_words(bag)}')
        folder = pathlib.Path(choice.tracker.goal.folder or '.')
        if not choice.tracker.goal.folder or not (folder / 'goal.yaml').is_file():
            raise ValueError(f'{bag.path}: expected a goal for its images, got none; give --goal '
                             'FOLDER, or --teach last to take the view from its end')
    elif not wanted:
        return None
    tracker = Tracker(choice.tracker, np.random.default_rng(request.seed))
    aimed = goal.load(folder) if folder is not None and not request.teach else _taught(
        bag, parts, request, choice, notes)
    answer = tracker.aim(aimed)
    if not answer.ok:
        raise ValueError(answer.text)
    return tracker


def _taught(bag: Bag, parts: Mapping[str, str], request: Request, choice: Choice,
            notes: list[str]) -> goal.Goal:
    """Return the goal that the recording shows at the wanted time."""
    image, depth, info = _messages_at(bag, parts, request.teach)
    if image is None or info is None:
        raise ValueError(f'{bag.path}: teach: expected an image and a calibration at '
                         f'{request.teach}, got {"no image" if image is None else "none"}')
    decode = Decoder()
    tracker = Tracker(choice.tracker, np.random.default_rng(request.seed))
    answer = tracker.calibrate(wire.calibration_from_message(decode(info)))
    if not answer.ok:
        raise ValueError(f'{bag.path}: teach: {answer.text}')
    at = f'{(image.time - bag.start) / SECOND_NS:.3f} s'
    lesson = tracker.teach(_image(decode, image), None if depth is None else _image(decode, depth),
                           taught=f'from {bag.path.name} at {at}')
    if lesson.goal is None:
        raise ValueError(f'{bag.path}: teach at {at}: {lesson.answer.text}')
    notes.append(f'the goal was taught from the recording at {at}: {lesson.answer.text}')
    return lesson.goal


def _messages_at(bag: Bag, parts: Mapping[str, str],
                 teach: str) -> tuple[Message | None, Message | None, Message | None]:
    """Return image, depth and calibration at `first`, `last`, or after some seconds."""
    try:
        seconds = {'first': 0.0, 'last': math.inf}.get(teach)
        seconds = float(teach) if seconds is None else seconds
    except ValueError:
        seconds = math.nan
    if not seconds >= 0.0:
        raise ValueError(f'teach: expected first, last or seconds since the start, got {teach!r}')
    held: dict[str, Message] = {}
    names = {parts[part]: part for part in ('image', 'compressed', 'depth', 'camera_info')
             if part in parts}
    for message in bag.messages(names):
        part = names[message.topic]
        held['image' if part == 'compressed' else part] = message
        late = message.time - bag.start >= seconds * SECOND_NS
        if late and 'image' in held and 'camera_info' in held:
            break
    return held.get('image'), held.get('depth'), held.get('camera_info')


def _image(decode: Decoder, message: Message) -> Image:
    found = decode(message)
    if message.kind.endswith('CompressedImage'):
        return image_from_bytes(found.data, wire.stamp_from_time(found.header.stamp),
                                str(found.header.frame_id))
    return wire.image_from_message(found)


def _topics_in_words(bag: Bag) -> str:
    words = [f'{topic} ({bag.kinds[topic]}, {count} messages)'
             for topic, count in sorted(bag.counts.items())]
    return ', '.join(words[:6]) + (f' and {len(words) - 6} more' if len(words) > 6 else '')
