# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Interaction matrices: how features move in the image when the camera moves.

A camera with the twist xi = (v, w) in its own optical frame sees a static point X = (X, Y, Z) move by
dX/dt = -v - w x X. With x = X/Z and y = Y/Z that gives ds/dt = L xi,

    L = [[-1/Z,    0, x/Z,    x y, -(1 + x^2),  y],
         [   0, -1/Z, y/Z, 1 + y^2,      -x y, -x]].

Sources: Weiss, Sanderson & Neuman 1987; Espiau, Chaumette & Rives 1992; Chaumette & Hutchinson 2006
(formulas from memory, re-derived). A camera that stands still and watches a moving target has the
opposite sign of every entry. Everything broadcasts over leading axes.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats


def points(points_xy: npt.ArrayLike, depths: npt.ArrayLike) -> Floats:
    """Return the stacked interaction matrices (..., 2N, 6) of points, rows x1, y1, x2, y2, ...

    Parameters
    ----------
    points_xy : (..., N, 2), normalised image coordinates
    depths : (..., N), m, along the optical axis, positive
    """
    points_xy = np.asarray(points_xy, dtype=np.float64)
    x, y = points_xy[..., 0], points_xy[..., 1]
    q = np.broadcast_to(1.0 / np.asarray(depths, dtype=np.float64), x.shape)
    matrix = np.zeros((*x.shape, 2, 6))
    matrix[..., 0, 0] = matrix[..., 1, 1] = -q
    matrix[..., 0, 2], matrix[..., 1, 2] = x * q, y * q
    xy = x * y
    matrix[..., 0, 3], matrix[..., 1, 4] = xy, -xy
    matrix[..., 0, 4], matrix[..., 1, 3] = -1.0 - x * x, 1.0 + y * y
    matrix[..., 0, 5], matrix[..., 1, 5] = y, -x
    return matrix.reshape(*x.shape[:-1], 2 * x.shape[-1], 6)
