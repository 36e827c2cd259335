# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The hybrid law: one point in the image, its depth ratio, and the rotation.

With s = (x, y, ln(Z / Z*), theta u) the interaction matrix is block-triangular and has an inverse
wherever the point is before the camera (Malis, Chaumette & Boudet 1999, "2 1/2 D", from memory).
The rotation runs along a constant axis, the point along a straight line in the image:

    w = -gain theta u,   v = -L_v^-1 (gain e_v + L_vw w),

    L_v = (1/Z) [[-1, 0, x], [0, -1, y], [0, 0, -1]].

The point is the middle of the goal's points in space, so that the pattern as a whole stays in view
and all points take part.
"""

from __future__ import annotations

import numpy as np

from servo_nodes import motion
from servo_nodes.control import interaction
from servo_nodes.values import Floats


def twists(T_GC: Floats, middle_G: Floats) -> Floats:
    """Return the twists (..., 6) of the hybrid law at gain 1.

    Parameters
    ----------
    T_GC : (..., 4, 4), pose of the camera in the goal's camera frame
    middle_G : (..., 3), m, the point in the goal's camera frame
    """
    rotation = T_GC[..., :3, :3]
    middle_C = np.einsum('...ji,...j->...i', rotation, middle_G - T_GC[..., :3, 3])
    depth = middle_C[..., 2]
    w = -motion.vector_from_rotation(rotation)
    with np.errstate(divide='ignore', invalid='ignore'):
        xy = middle_C[..., :2] / depth[..., None]
        stretch = np.log(depth / middle_G[..., 2])
        rows = interaction.points(xy[..., None, :], depth[..., None])
        row = interaction.log_depth_ratio(xy, depth)
    goal_xy = middle_G[..., :2] / middle_G[..., 2:]
    image = goal_xy - xy - np.einsum('...ij,...j->...i', rows[..., 3:], w)
    v_z = depth * (stretch + (row[..., 3:] * w).sum(-1))
    v_xy = xy * v_z[..., None] - depth[..., None] * image
    return np.concatenate([v_xy, v_z[..., None], w], axis=-1)
