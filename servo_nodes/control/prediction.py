# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where the points are by now: the twists sent since the image was taken, integrated exactly.

A loop with gain g and pure dead time tau overshoots beyond g tau = 1 / e and is unstable beyond pi
/ 2. But what the camera did during the dead time is known: it is what was sent. A twist sent at t
acts from t + delay on (the arm's own lag), so an image taken at s shows the result of the twists
sent before s - delay, and a decision made now will act at now + delay. Moving the points of the
image through all twists sent in [s - delay, now] puts the decision where it belongs (a Smith
predictor: Smith 1957, from memory; here with the exact SE(3) motion and hence no model but the
delay).

`motion.exp` broadcasts, which costs far more than one motion does; the loop needs one at a time,
so `rigid` spells it out in plain numbers, and `dot` multiplies, at half the cost of `@`.
"""

from __future__ import annotations

import collections
import math
import typing

import numpy as np

from servo_nodes.values import SECOND_NS, Floats, Stamp

HISTORY = 512
_CLOSEST = 0.1


def rigid(twist: typing.Sequence[float], duration: float) -> Floats:
    """Return the motion (4, 4) of one constant twist (6 numbers) for `duration` s."""
    vx, vy, vz, wx, wy, wz = (duration * float(part) for part in twist)
    square = wx * wx + wy * wy + wz * wz
    if square < 1e-4:
        a = 1 - square / 6 * (1 - square / 20 * (1 - square / 42))
        b = 0.5 - square / 24 * (1 - square / 30 * (1 - square / 56))
        c = 1 / 6 - square / 120 * (1 - square / 42 * (1 - square / 72))
    else:
        angle = math.sqrt(square)
        half = math.sin(0.5 * angle) / (0.5 * angle)
        a, b = math.sin(angle) / angle, 0.5 * half * half
        c = (angle - math.sin(angle)) / (angle * square)
    d, e, along = 1 - b * square, 1 - c * square, wx * vx + wy * vy + wz * vz
    return np.array((
        d + b * wx * wx, b * wx * wy - a * wz, b * wx * wz + a * wy,
        e * vx + c * wx * along + b * (wy * vz - wz * vy),
        b * wx * wy + a * wz, d + b * wy * wy, b * wy * wz - a * wx,
        e * vy + c * wy * along + b * (wz * vx - wx * vz),
        b * wx * wz - a * wy, b * wy * wz + a * wx, d + b * wz * wz,
        e * vz + c * wz * along + b * (wx * vy - wy * vx),
        0.0, 0.0, 0.0, 1.0)).reshape(4, 4)


class Odometer:
    """What the sent twists add up to; a twist holds until the next one is recorded.

    Kept as passages: the matrix that takes points of the camera's frame when the first twist was
    recorded to its frame now. They are products of exact motions, orthonormal again now and then.
    """

    def __init__(self) -> None:
        self._log: collections.deque[tuple[Stamp, Floats, list[float]]] = collections.deque(
            maxlen=HISTORY)
        self._latest: tuple[Stamp, Floats] | None = None
        self._start: tuple[Stamp, Floats] | None = None
        self._count = 0

    def clear(self) -> None:
        """Forget everything: the camera is taken to be at rest."""
        self._log.clear()
        self._latest = self._start = None

    def record(self, twist: Floats, now: Stamp) -> None:
        """Note that `twist` (6,), camera in its optical frame, is sent from `now`, ns, on.

        Time that runs backwards forgets the past.
        """
        if self._log and now < self._log[-1][0]:
            self.clear()
        passage = self._passage_now(now) if self._log else np.eye(4)
        self._count += 1
        if self._count % HISTORY == 0:
            rotation = passage[:3, :3]
            passage = passage.copy()
            passage[:3, :3] = rotation @ (1.5 * np.eye(3) - 0.5 * rotation.T @ rotation)
        self._log.append((now, passage, twist.tolist()))

    def _passage_at(self, time: Stamp) -> Floats:
        for start, passage, twist in reversed(self._log):
            if start == time:
                return passage
            if start < time:
                later: Floats = rigid(twist, (start - time) / SECOND_NS).dot(passage)
                return later
        return self._log[0][1]

    def _passage_now(self, now: Stamp) -> Floats:
        """Return the passage at `now`; a decision and its record ask for the same moment."""
        if self._latest is None or self._latest[0] != now:
            self._latest = now, self._passage_at(now)
        return self._latest[1]

    def passage(self, start: Stamp, end: Stamp) -> Floats | None:
        """Return the matrix (4, 4) from the camera's frame at `start` to that at `end`.

        None for no motion. What was recorded up to `start` must be complete: it is looked up once.
        """
        if not self._log or end <= start or end <= self._log[0][0]:
            return None
        if self._start is None or self._start[0] != start:
            self._start = start, _undone(self._passage_at(start))
        between: Floats = self._passage_now(end).dot(self._start[1])
        return between


def _undone(passage: Floats) -> Floats:
    back = np.zeros((4, 4))
    turned = passage[:3, :3].T
    back[:3, :3] = turned
    back[:3, 3] = -(turned @ passage[:3, 3])
    back[3, 3] = 1.0
    return back


def homogeneous(points_xy: Floats, depths: Floats) -> Floats:
    """Return (x, y, 1, 1/Z), (4, N), of points (N, 2) and depths (N,), m."""
    rays = np.empty((4, len(depths)))
    rays[:2] = points_xy.T
    rays[2] = 1.0
    np.divide(1.0, depths, out=rays[3])
    return rays


def moved(rays: Floats, passage: Floats) -> tuple[Floats, Floats]:
    """Return points (2, N), normalised, and 1/Z (N,), 1/m, in the frame the passage leads to.

    Parameters
    ----------
    rays : (4, N), (x, y, 1, 1/Z) before
    passage : (4, 4), takes points of the camera's frame before to its frame afterwards

    A point that would come closer than a tenth of its depth keeps its old place: no prediction is
    better than one through the lens.
    """
    seen: Floats = passage[:3].dot(rays)
    ahead = seen[2]
    if np.minimum.reduce(ahead) > _CLOSEST:
        return seen[:2] / ahead, rays[3] / ahead
    fine = ahead > _CLOSEST
    factor = np.where(fine, ahead, 1.0)
    return np.where(fine, seen[:2] / factor, rays[:2]), rays[3] / factor
