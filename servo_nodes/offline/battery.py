# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The task battery on which the laws are compared, with exact motion and nothing else.

Four canonical tasks and what is measured on them follow Gans, Hutchinson & Corke (ICRA 2002,
IJRR 2003, from memory): a roll about the optical axis, an approach along it, a turn of the
target's plane, and a general motion; samples until the points are home, largest excursions of
the points and of the camera. The camera obeys at once and exactly, depths are true, there are no
caps: it is the law alone that is seen. The target is a square of 0.2 m, its goal 0.5 m straight
ahead.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.control import law, path, pose
from servo_nodes.values import Floats

GAIN, STEP, SAMPLES, FOCAL_PX, HOME_PX = 0.5, 0.04, 400, 500.0, 0.5
HALF_SIDE, DISTANCE = 0.1, 0.5
NEAREST, FARTHEST = 0.02, 50.0


@dataclass(frozen=True, eq=False)
class Task:
    """A start: pose of the target in the camera frame, rotation vector in degrees, m."""

    name: str
    words: str
    vector_deg: tuple[float, float, float]
    translation: tuple[float, float, float]

    @property
    def pose(self) -> Floats:
        """Return the pose (4, 4) of the target in the camera frame at the start."""
        return motion.pose_from_parts(motion.rotation_from_vector(np.radians(self.vector_deg)),
                                      self.translation)


TASKS = (
    Task('roll', 'roll of 90°', (0, 0, 90), (0, 0, 0.5)),
    Task('advance', 'from twice the distance', (0, 0, 0), (0, 0, 1.0)),
    Task('plane', 'plane turned by 40°', (0, 40, 0), (0, 0, 0.5)),
    Task('general', 'general', (10, -15, 20), (0.05, -0.03, 0.7)),
    Task('far', 'general, far', (20, -30, 100), (0.1, -0.05, 0.8)),
    Task('roll170', 'roll of 170°', (0, 0, 170), (0, 0, 0.5)),
    Task('roll180', 'roll of 180°', (0, 0, 180), (0, 0, 0.5)),
)


@dataclass(frozen=True)
class Outcome:
    """What one law made of one task.

    Attributes
    ----------
    samples : int, until the worst point is within `HOME_PX`; -1 for never
    final_px : float, error of the worst point at the end
    feature_px : float, largest distance of a point from the principal point
    camera : float, m, largest distance of the camera from its goal
    angle_deg : float, largest angle of the camera from its goal
    stopped : str, why the run ended early; empty when it did not
    end : (4, 4), pose of the target in the camera frame at the end
    """

    samples: int
    final_px: float
    feature_px: float
    camera: float
    angle_deg: float
    stopped: str
    end: Floats

    @property
    def failed(self) -> bool:
        """Whether the points never came home."""
        return self.samples < 0


def square() -> Floats:
    """Return the corners (4, 3), m, of the target in its own frame."""
    a = HALF_SIDE
    return np.array([(-a, -a, 0.0), (a, -a, 0.0), (a, a, 0.0), (-a, a, 0.0)])


def home() -> Floats:
    """Return the pose (4, 4) of the target in the camera frame at the goal."""
    return motion.pose_from_parts(np.eye(3), (0.0, 0.0, DISTANCE))


def starts() -> Floats:
    """Return the starts (T, 4, 4) of all tasks."""
    return np.array([task.pose for task in TASKS])


def run(begin: Floats, settings: law.LawSettings, *, goal: Floats | None = None,
        corners: Floats | None = None, planned: bool = False, gain: float = GAIN,
        step: float = STEP, samples: int = SAMPLES) -> list[Outcome]:
    """Return what the law makes of each of the starts.

    Parameters
    ----------
    begin : (B, 4, 4), pose of the target in the camera frame
    settings : LawSettings; its gain is not used
    goal : (4, 4), pose of the target in the camera frame at the goal; None for `home`
    corners : (N, 3), m, points of the target; None for the square
    planned : bool, lead the law along a planned path
    gain : float, 1/s
    step : float, s
    samples : int

    A run that comes too near, gets out of sight or has no finite twist stops where it is.
    """
    goal = home() if goal is None else goal
    corners = square() if corners is None else corners
    goal_xy, goal_depths = pose.image(goal, corners)
    points_G = pose.structure(goal_xy, goal_depths)
    way, left = None, 1.0
    now = np.array(begin, dtype=np.float64)
    stopped = np.full(len(now), '', dtype='U32')
    traces = np.empty((samples + 1, len(now), 4))
    for k in range(samples + 1):
        xy, depths = pose.image(now, corners)
        traces[k] = _trace(xy, goal_xy, now, goal)
        _stop(stopped, depths.min(-1) <= NEAREST, 'meets the target')
        _stop(stopped, depths.max(-1) >= FARTHEST, 'retreats without end')
        aim_xy, aim_depths, along = goal_xy, goal_depths, np.zeros(6)
        if planned:
            if way is None:
                way = path.planned(law.poses(xy, goal_xy, depths, goal_depths, settings))
            aim_xy, aim_depths = way.points(left, points_G)
            along = way.twists(left, gain * left)
            left -= gain * left * step
        twist = along + law.twists(xy, aim_xy, depths, aim_depths, settings, gain=gain)
        _stop(stopped, ~np.isfinite(twist).all(-1), 'has no finite twist')
        if k < samples:
            twist[stopped != ''] = 0.0
            now = motion.exp(-twist * step) @ now
    return [_outcome(traces[:, k], str(stopped[k]), now[k]) for k in range(len(now))]


def _stop(stopped: npt.NDArray[np.str_], which: npt.ArrayLike, why: str) -> None:
    stopped[np.asarray(which) & (stopped == '')] = why


def _trace(xy: Floats, goal_xy: Floats, now: Floats, goal: Floats) -> Floats:
    """Return error px, reach px, distance m and angle deg, (B, 4), of the camera from its goal."""
    worst = FOCAL_PX * np.linalg.norm(xy - goal_xy, axis=-1).max(-1)
    reach = FOCAL_PX * np.linalg.norm(xy, axis=-1).max(-1)
    place = goal @ motion.inverse(now)
    away = np.linalg.norm(place[:, :3, 3], axis=-1)
    angle = np.linalg.norm(motion.vector_from_rotation(place[:, :3, :3]), axis=-1)
    return np.stack([worst, reach, away, np.degrees(angle)], axis=-1)


def _outcome(traces: Floats, stopped: str, end: Floats) -> Outcome:
    home_at = np.flatnonzero(traces[:, 0] <= HOME_PX)
    samples = int(home_at[0]) if home_at.size and not stopped else -1
    feature, camera, angle = (float(most) for most in traces[:, 1:].max(0))
    return Outcome(samples, float(traces[-1, 0]), feature, camera, angle, stopped, end)
