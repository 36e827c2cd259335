# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""When do points that agree mean that the goal is seen? The rule of acceptance.

Two questions, each answered by the expected number of times chance would do as well (Desolneux,
Moisan & Morel, From Gestalt Theory to Image Analysis, 2008; Moisan & Stival, IJCV 57, 2004;
formulas from memory):

* *Keypoints.* Of n pairs, k lie within eps px of where a homography through 4 of them puts them. A
  wrong pair does so with probability alpha = pi eps^2 / area of the image, so chance is expected
  to manage

      (n - 4) C(n, k) C(k, 4) alpha^(k - 4)   times.

* *Pixels.* Of the m goal points that should be in the image, v were verified: their patch,
  registered there, is like the goal's and lies where the others put it. A wrong patch passes with
  a probability of at most BY_CHANCE (measured on wrong photographs at random views: none of thirty
  thousand did), so chance manages P(Binomial(m, BY_CHANCE) >= v).

Both must be below 10^LOG10_ONCE_IN, the verified must be enough, a fair share of what should be
seen, and spread.
"""

from __future__ import annotations

import math

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats

LOG10_ONCE_IN = -6.0
BY_CHANCE = 0.03
LEAST_SHARE = 0.25
# Standard deviation of the verified points along their narrow direction, in image heights.
LEAST_SPREAD = 0.03
_ROUNDS, _CONFIDENCE = 3000, 0.999


def log10_alarms(pairs: int, agreeing: int, threshold_px: float, area_px: float) -> float:
    """Return log10 of the expected number of chance agreements among keypoints; see the head."""
    if agreeing <= 4:
        return math.inf
    alpha = min(1.0, math.pi * threshold_px ** 2 / area_px)
    return (math.log10(pairs - 4) + _log10_choose(pairs, agreeing) + _log10_choose(agreeing, 4)
            + (agreeing - 4) * math.log10(alpha)) if pairs > 4 else math.inf


def log10_chance(expected: int, verified: int) -> float:
    """Return log10 of a bound on the chance that so many of the expected wrong patches pass.

    The bound on the binomial's tail is Chernoff's: exp(-m D(v/m || p)), D the relative entropy.
    """
    share = verified / max(expected, 1)
    if not BY_CHANCE < share <= 1.0:
        return 0.0
    nats = share * math.log(share / BY_CHANCE)
    if share < 1.0:
        nats += (1 - share) * math.log((1 - share) / (1 - BY_CHANCE))
    return -expected * nats / math.log(10)


def plane_through(goal_xy: Floats, xy: Floats,
                  threshold: float) -> tuple[Floats, npt.NDArray[np.bool_]] | None:
    """Return the homography most pairs agree on and which do; coordinates normalised, (N, 2)."""
    if len(xy) < 4:
        return None
    # In units of the threshold: the estimator's own tolerances are made for about pixels.
    matrix, inside = cv2.findHomography(goal_xy / threshold, xy / threshold, cv2.USAC_MAGSAC, 1.0,
                                        maxIters=_ROUNDS, confidence=_CONFIDENCE)
    if matrix is None or not np.isfinite(matrix).all():
        return None
    units = np.array([threshold, threshold, 1.0])
    return (matrix * units[:, None] / units, np.asarray(inside).reshape(-1).astype(bool))


def spread_px(uv: Floats) -> float:
    """Return the standard deviation of points (N, 2) along the direction in which it is least."""
    if len(uv) < 3:
        return 0.0
    apart = uv - uv.mean(0)
    (a, c), (_, b) = apart.T @ apart / (len(uv) - 1)
    return math.sqrt(max((a + b) / 2 - math.hypot((a - b) / 2, c), 0.0))


def _log10_choose(n: int, k: int) -> float:
    return (math.lgamma(n + 1) - math.lgamma(k + 1) - math.lgamma(n - k + 1)) / math.log(10)
