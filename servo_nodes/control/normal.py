# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The normal equations of one view's points, without ever building the stack.

Both rows of the interaction matrix of a point, and its error, are combinations of ten numbers,

    b = (q, x q, y q, x y, 1 + x^2, 1 + y^2, x, y, e_x, e_y),     q = 1/Z,
    row_r = S_r b,     (S_r is 7 x 10: six columns of L, then the error)

so that with C = sum_i w_i^2 b_i b_i^T the augmented normal matrix is linear in C:

    [[L^T W^2 L, L^T W^2 e], [e^T W^2 L, e^T W^2 e]] = sum_r S_r C S_r^T.

One product of 10 x N with N x 10 and one table look-up replace the assembly of 2N rows. The mean
matrix (L + L*) / 2 has the mean of the bases. The live loop solves for one view at a time, a
hundred times a second, beside other work on the same core; that is what this module is for, and
why `dot` multiplies here: on matrices this small it costs half of what `@` does.
`law.twists` does the same for many starts through the stacks.
"""

from __future__ import annotations

import numpy as np

from servo_nodes.values import Floats

Q, XQ, YQ, XY, ONE_X2, ONE_Y2, X, Y, EX, EY = range(10)
SIZE = 10
MIXED = slice(0, EX)


def _selections() -> Floats:
    """Return S (2, 7, 10) of the module's head."""
    s = np.zeros((2, 7, SIZE))
    s[0, 0, Q], s[0, 2, XQ], s[0, 3, XY], s[0, 4, ONE_X2], s[0, 5, Y] = -1, 1, 1, -1, 1
    s[1, 1, Q], s[1, 2, YQ], s[1, 3, ONE_Y2], s[1, 4, XY], s[1, 5, X] = -1, 1, 1, -1, -1
    s[0, 6, EX] = s[1, 6, EY] = 1
    return s


SELECTIONS = _selections()
_TABLE = np.ascontiguousarray(
    np.einsum('ria,rjb->ijab', SELECTIONS, SELECTIONS).reshape(49, SIZE * SIZE))
_LEFT = np.ascontiguousarray(np.swapaxes(SELECTIONS[:, :6], -1, -2))
_ERRORS = SELECTIONS[:, 6]


def basis(xy: Floats, inverse_depths: Floats, goal_xy: Floats | None = None) -> Floats:
    """Return the basis (10, N) of points `xy` (2, N), normalised, at 1/Z (N,), 1/m.

    The error is left empty without `goal_xy` (2, N).
    """
    b = np.empty((SIZE, xy.shape[1]))
    b[Q] = inverse_depths
    np.multiply(xy, inverse_depths, out=b[XQ:XY])
    np.multiply(xy[0], xy[1], out=b[XY])
    squares = b[ONE_X2:X]
    np.multiply(xy, xy, out=squares)
    squares += 1.0
    b[X:EX] = xy
    if goal_xy is not None:
        np.subtract(xy, goal_xy, out=b[EX:])
    return b


def mean_basis(here: Floats, there: Floats) -> Floats:
    """Return the basis (10, N) of the mean matrix, with the error of `here`."""
    b = here + there
    b *= 0.5
    b[EX:] = here[EX:]
    return b


def system(b: Floats, squared_weights: Floats) -> Floats:
    """Return the augmented normal matrix (7, 7) of a basis (10, N) with w^2 (N,)."""
    moments = (b * squared_weights).dot(b.T)
    matrix: Floats = _TABLE.dot(moments.reshape(-1)).reshape(7, 7)
    return matrix


def squared_residuals(b: Floats, x: Floats) -> Floats:
    """Return the squared lengths (N,) of e - L x for a basis (10, N) and x (6,)."""
    left: Floats = (_ERRORS - _LEFT.dot(x)).dot(b)
    left *= left
    total: Floats = left[0] + left[1]
    return total


def stack(b: Floats) -> tuple[Floats, Floats]:
    """Return the rows (2N, 6) and the error (2N,) of a basis (10, N): x1, y1, x2, ..."""
    rows = np.moveaxis(SELECTIONS @ b, -1, 0).reshape(-1, 7)
    return rows[:, :6], rows[:, 6]
