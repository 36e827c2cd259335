# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A planned path of the points in the image, which any law can follow.

The camera goes straight to the goal while it turns about a constant axis; with `left` from 1 to 0

    T_GC(left) = (left t, exp(left theta u)),

and the goal's points as seen from there are where the law wants them at that moment (Mezouar &
Chaumette 2002, from memory; on a plane it is the homography H = R + t n^T / d of that pose). The
law then never has far to go, which takes rolls up to and including 180 degrees and large
displacements out of the reach of local minima, retreat and singular matrices. Following without
lag takes the path's own velocity on top of the law, as xi = -gain M (s - s_path) + xi_path.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.control import pose
from servo_nodes.values import Floats

ARRIVED = 0.01


@dataclass(frozen=True, eq=False)
class Path:
    """The way home of a camera from where it was when the path was planned.

    Attributes
    ----------
    shift : (..., 3), m, position of the camera in the goal's camera frame
    vector : (..., 3), rad, its rotation vector there
    """

    shift: Floats
    vector: Floats

    def poses(self, left: npt.ArrayLike) -> Floats:
        """Return T_GC (..., 4, 4) with the share `left` (...) of the way to go."""
        left = np.asarray(left, dtype=np.float64)[..., None]
        return motion.pose_from_parts(motion.rotation_from_vector(left * self.vector),
                                      left * self.shift)

    def points(self, left: npt.ArrayLike, points_G: Floats) -> tuple[Floats, Floats]:
        """Return image points (..., N, 2) and depths (..., N), m, of goal points on the way."""
        return pose.image(motion.inverse(self.poses(left)), points_G)

    def twists(self, left: npt.ArrayLike, rate: npt.ArrayLike) -> Floats:
        """Return the twists (..., 6) along the path when `left` shrinks by `rate` (...), 1/s."""
        rotation = self.poses(left)[..., :3, :3]
        v = -np.einsum('...ji,...j->...i', rotation, self.shift)
        both = np.concatenate([v, np.broadcast_to(-self.vector, v.shape)], axis=-1)
        return both * np.asarray(rate, dtype=np.float64)[..., None]

    def rates(self, left: npt.ArrayLike, *, gain: float, linear: float = np.inf,
              angular: float = np.inf) -> Floats:
        """Return how fast (...), 1/s, `left` may shrink: gain left, within m/s and rad/s."""
        left = np.asarray(left, dtype=np.float64)
        with np.errstate(divide='ignore'):
            limit = np.minimum(linear / np.linalg.norm(self.shift, axis=-1),
                               angular / np.linalg.norm(self.vector, axis=-1))
        rates: Floats = np.minimum(gain * left, limit)
        return rates


def planned(T_GC: npt.ArrayLike) -> Path:
    """Return the path home from poses (..., 4, 4) of the camera in the goal's camera frame."""
    T_GC = np.asarray(T_GC, dtype=np.float64)
    return Path(T_GC[..., :3, 3], motion.vector_from_rotation(T_GC[..., :3, :3]))
