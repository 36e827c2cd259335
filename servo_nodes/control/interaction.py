# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Interaction matrices: how features move in the image when the camera moves.

A camera with the twist xi = (v, w) in its own optical frame sees a static point X = (X, Y, Z) move
by dX/dt = -v - w x X. With x = X/Z and y = Y/Z that gives ds/dt = L xi,

    L = [[-1/Z,    0, x/Z,    x y, -(1 + x^2),  y],
         [   0, -1/Z, y/Z, 1 + y^2,      -x y, -x]].

Sources: Weiss, Sanderson & Neuman 1987; Espiau, Chaumette & Rives 1992; Chaumette & Hutchinson
2006 (formulas from memory, re-derived). A camera that stands still and watches a moving target has
the opposite sign of every entry. Everything broadcasts over leading axes.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
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


def polar_coordinates(points_xy: npt.ArrayLike) -> Floats:
    """Return (rho, alpha) (..., N, 2) of points (..., N, 2), alpha in (-pi, pi]."""
    points_xy = np.asarray(points_xy, dtype=np.float64)
    x, y = points_xy[..., 0], points_xy[..., 1]
    return np.stack([np.hypot(x, y), np.arctan2(y, x)], axis=-1)


def polar(points_xy: npt.ArrayLike, depths: npt.ArrayLike) -> Floats:
    """Return the interaction matrices (..., 2N, 6) of (rho, rho alpha) of points (..., N, 2).

    The angle's row is times rho, a length in the image like its neighbour, and stays finite at the
    centre. Divided by rho it is the row of alpha itself (Iwatsuki & Okiyama 2005; Chaumette &
    Hutchinson 2007; formulas from memory, re-derived):

        rho   [-c/Z,        -s/Z, rho/Z, (1 + rho^2) s, -(1 + rho^2) c,  0],  c = cos(alpha)
        alpha [ s/(rho Z), -c/(rho Z), 0,    c / rho,         s / rho,  -1],  s = sin(alpha)
    """
    rho_alpha = polar_coordinates(points_xy)
    rho = rho_alpha[..., 0]
    c, s = np.cos(rho_alpha[..., 1]), np.sin(rho_alpha[..., 1])
    q = 1.0 / np.asarray(depths, dtype=np.float64)
    matrix = np.zeros((*rho.shape, 2, 6))
    matrix[..., 0, 0], matrix[..., 0, 1], matrix[..., 0, 2] = -c * q, -s * q, rho * q
    matrix[..., 0, 3], matrix[..., 0, 4] = (1 + rho * rho) * s, -(1 + rho * rho) * c
    matrix[..., 1, 0], matrix[..., 1, 1] = s * q, -c * q
    matrix[..., 1, 3], matrix[..., 1, 4], matrix[..., 1, 5] = c, s, -rho
    return matrix.reshape(*rho.shape[:-1], 2 * rho.shape[-1], 6)


def log_depth_ratio(point_xy: npt.ArrayLike, depth: npt.ArrayLike) -> Floats:
    """Return the rows (..., 6) of ln(Z / Z*) of a point (..., 2) at depth Z (...), m.

    (Malis, Chaumette & Boudet 1999, from memory, re-derived.)
    """
    point_xy = np.asarray(point_xy, dtype=np.float64)
    row = np.zeros((*point_xy.shape[:-1], 6))
    row[..., 2] = -1.0 / np.asarray(depth, dtype=np.float64)
    row[..., 3], row[..., 4] = -point_xy[..., 1], point_xy[..., 0]
    return row


def theta_u(vector: npt.ArrayLike) -> Floats:
    """Return L_w (..., 3, 3) with d(theta u)/dt = L_w w, for the rotation c*Rc = exp(theta u).

    I + theta/2 [u] + (1 - sinc(theta) / sinc^2(theta/2)) [u]^2 (Malis, Chaumette & Boudet 1999):
    the inverse of the right Jacobian of SO(3). It is singular at theta = 2 pi only.
    """
    return motion.left_jacobian_inverse(-np.asarray(vector, dtype=np.float64))


def hybrid(point_xy: npt.ArrayLike, depth: npt.ArrayLike, vector: npt.ArrayLike) -> Floats:
    """Return the interaction matrices (..., 6, 6) of (x, y, ln(Z / Z*), theta u)."""
    point_xy = np.asarray(point_xy, dtype=np.float64)
    depth = np.asarray(depth, dtype=np.float64)
    matrix = np.zeros((*depth.shape, 6, 6))
    matrix[..., :2, :] = points(point_xy[..., None, :], depth[..., None])
    matrix[..., 2, :] = log_depth_ratio(point_xy, depth)
    matrix[..., 3:, 3:] = theta_u(vector)
    return matrix
