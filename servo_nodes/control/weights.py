# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Weights of points out of their own disagreement: M-estimators by reweighted least squares.

The twist that explains e = s - s* best leaves the residual r = e - A x of each point; with sigma =
1.4826 MAD of the residuals' lengths (never below a floor, because MAD = 0 as soon as half of them
agree) and u = |r| / sigma,

    huber   w = 1 for u <= k, k / u beyond                  k = 1.345
    tukey   w = (1 - (u / c)^2)^2 for u < c, 0 beyond       c = 4.685

(95 % efficiency for normal noise; Huber 1981, Beaton & Tukey 1974, from memory.) They enter the
law as xi = -gain (D L)^+ D e with D = diag(w) (Comport, Marchand & Chaumette 2006, from memory). A
stack is taken whose remainder is of third order in the displacement, the mean matrix: with any
other the curved paths of honest points would count as outliers.

The first rounds weigh by 1 / |r|, which one wild point cannot drag along as it does least squares.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import lapack

from servo_nodes.control import normal
from servo_nodes.values import Floats

ESTIMATORS = ('none', 'huber', 'tukey')
MAD_TO_SIGMA = 1.482602219
HUBER = 1.345
TUKEY = 4.685
LEAST_POINTS = 6
_ABSOLUTE_ROUNDS = 4
_ROUNDS = 2
_MANY_POINTS = 12
_HARDLY = 0.5


def huber(squares: Floats) -> Floats:
    """Return Huber's weights (...) of squared scaled residuals u^2 (...)."""
    return HUBER / np.sqrt(np.maximum(squares, HUBER * HUBER))


def tukey(squares: Floats) -> Floats:
    """Return Tukey's biweight (...) of squared scaled residuals u^2 (...)."""
    inside = np.maximum(1.0 - squares * (1.0 / (TUKEY * TUKEY)), 0.0)
    inside *= inside
    return inside


def of_points(basis: Floats, trust: Floats, *, estimator: str, floor: float,
              before: Floats | None = None) -> Floats:
    """Return weights (N,), 0..1, of one view's points.

    Parameters
    ----------
    basis : (10, N), of `normal`, with the error; the mean matrix judges displacements most fairly
    trust : (N,), what is known about the points beforehand, 0..1
    estimator : str, one of `ESTIMATORS`
    floor : float, least standard deviation of a residual, in the unit of the error
    before : (N,), weights of the same points in the last view: one round confirms them when there
        are many points, and they hardly change

    Fewer than `LEAST_POINTS` points cannot outvote one among them: they keep weight 1.
    """
    count = len(trust)
    if estimator == 'none' or count < LEAST_POINTS:
        return np.ones(count)
    if before is not None and count >= _MANY_POINTS:
        weights = _round(basis, trust * before, estimator, floor)
        if weights is not None:
            change = weights - before
            if np.maximum.reduce(np.abs(change)) < _HARDLY:
                return weights
    weights = np.ones(count)
    for _ in range(_ABSOLUTE_ROUNDS):
        squares = _squared_residuals(basis, trust * weights)
        if squares is None:
            return np.ones(count)
        weights = np.sqrt(floor / np.sqrt(np.maximum(squares, floor * floor)))
    for _ in range(_ROUNDS):
        found = _round(basis, trust * weights, estimator, floor)
        if found is None:
            return np.ones(count)
        weights = found
    return weights


def _round(basis: Floats, rows: Floats, estimator: str, floor: float) -> Floats | None:
    """Return the weights (N,) after one fit weighted by `rows` (N,); None without rank."""
    squares = _squared_residuals(basis, rows)
    if squares is None:
        return None
    half = len(squares) // 2
    middle = float(np.partition(squares, half)[half])
    squares *= 1.0 / max(MAD_TO_SIGMA ** 2 * middle, floor * floor)
    return tukey(squares) if estimator == 'tukey' else huber(squares)


def _squared_residuals(basis: Floats, rows: Floats) -> Floats | None:
    """Return the squared lengths (N,) of what the fit leaves; None when it has no full rank."""
    system = normal.system(basis, rows * rows)
    _, x, info = lapack.dposv(system[:6, :6], system[:6, 6])
    return None if info else normal.squared_residuals(basis, x)
