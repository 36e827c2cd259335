# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Goals between the disk and the tracker: aims at what is there, saves what is taught."""

from __future__ import annotations

import pathlib

from servo_nodes import goal
from servo_nodes.tracking.tracker import Tracker
from servo_nodes.values import Answer, Image


def aimed(tracker: Tracker, folder: str) -> Answer:
    """Aim at the goal in a folder; an empty or absent folder is no goal yet, which is no fault."""
    place = pathlib.Path(folder)
    if not folder or not place.is_dir() or not any(place.iterdir()):
        where = f'in goal.folder {folder}' if folder else 'for goal.folder is empty'
        return Answer(True, f'no goal {where}: show the camera the view and call ~/teach')
    try:
        answer = tracker.aim(goal.load(folder))
    except (ValueError, OSError) as error:
        return Answer(False, str(error))
    return Answer(answer.ok, f'goal.folder {folder}: {answer.text}')


def taught(tracker: Tracker, image: Image, depth: Image | None, folder: str) -> Answer:
    """Make a goal of an image, save it in a folder if one is named, and aim at it."""
    lesson = tracker.teach(image, depth, taught='by ~/teach')
    if lesson.goal is None:
        return lesson.answer
    where = 'kept in memory only, for goal.folder is empty'
    if folder:
        try:
            goal.save(lesson.goal, folder)
        except ValueError as error:
            return Answer(False, str(error))
        where = f'saved in {folder}'
    answer = tracker.aim(lesson.goal)
    return Answer(answer.ok, f'{lesson.answer.text}; {where}; {answer.text}')
