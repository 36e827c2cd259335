# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Is a view fit to be a goal? Accepted, accepted with a warning, or refused when taught.

The pose scatter a goal allows is predicted from its own pixels: a point's patch gives the variance
of its coordinates for the picture's noise, the rows of the interaction matrix of a point,

    L = [-1/Z  0     x/Z   x y    -(1 + x^2)   y]
        [0     -1/Z  y/Z   1+y^2  -x y        -x]      (Espiau, Chaumette & Rives 1992),

turn them into the covariance (L^T S^-1 L)^-1 of the camera's pose. Noise is estimated as the
median of a Laplacian's response that smooth shading leaves at zero (kernel of Immerkaer, CVIU 64,
1996).
"""

from __future__ import annotations

import typing
from dataclasses import dataclass, field

import cv2
import numpy as np

from servo_nodes.goal import Goal
from servo_nodes.tracking import consensus
from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import Floats

AXES = ('x', 'y', 'z', 'rx', 'ry', 'rz')
MOST_SATURATED, LEAST_SPREAD = 0.2, 0.08
MOST_BLUR, MOST_SCATTER, MOST_TURN = 0.93, 5e-4, np.radians(0.05)
REPEATS_SHARE = 0.35
HOPELESS_SCATTER, HOPELESS_TURN = 5e-3, np.radians(0.5)
_LAPLACIAN = np.array([[1, -2, 1], [-2, 4, -2], [1, -2, 1]], dtype=np.float32)
_MAD = 1.482602219
_LEAST_NOISE = 0.5


@dataclass(frozen=True)
class Verdict:
    """`refusal` and `warnings` in words (empty: none), and the `figures` behind them."""

    refusal: str
    warnings: tuple[str, ...]
    figures: dict[str, typing.Any] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Evidence:
    """Points of a view: `uv`, `xy` (N, 2), `depths`, `scatter_px` at noise 1 (N,)."""

    uv: Floats
    xy: Floats
    depths: Floats
    scatter_px: Floats


def judged(goal: Goal, evidence: Evidence, *, least_points: int,
           elsewhere: int | None) -> Verdict:
    """Judge a view; `elsewhere` None (markers) leaves out sharpness and repetition."""
    view = goal.view
    noise = noise_of(view)
    saturated = float(np.mean((view <= 1) | (view >= 254)))
    spread = consensus.spread_px(evidence.uv) / goal.camera.height
    figures: dict[str, typing.Any] = {
        'points': len(evidence.uv), 'noise_levels': round(noise, 2),
        'saturated_share': round(saturated, 3), 'spread': round(spread, 3)}
    if len(evidence.uv) < least_points:
        return Verdict(f'{len(evidence.uv)} usable points, {least_points} needed: give the view '
                       'more texture, light or focus', (), figures)
    if spread < consensus.LEAST_SPREAD:
        return Verdict('the usable points lie on a line or in a corner', (), figures)
    scatter, condition = pose_scatter(evidence, noise, goal.camera.fx)
    figures['condition'] = round(condition, 1)
    figures['scatter'] = {axis: float(f'{value:.3g}')
                          for axis, value in zip(AXES, scatter, strict=True)}
    worst, turn = float(scatter[:3].max()), float(scatter[3:].max())
    if not (worst <= HOPELESS_SCATTER and turn <= HOPELESS_TURN):
        return Verdict(f'the pose would scatter by {worst * 1e3:.1f} mm and '
                       f'{np.degrees(turn):.2f} degrees: the points hardly tell where the '
                       'camera is', (), figures)
    warnings = []
    if worst > MOST_SCATTER or turn > MOST_TURN:
        warnings.append(f'the pose will scatter by {worst * 1e3:.2f} mm and '
                        f'{np.degrees(turn):.3f} degrees')
    if saturated > MOST_SATURATED:
        warnings.append(f'{saturated:.0%} of the view is black or white: change the exposure')
    if spread < LEAST_SPREAD:
        warnings.append('the points crowd in a small part of the view')
    if elsewhere is not None:
        blur = blur_of(view)
        figures['blur'] = round(blur, 3)
        if blur > MOST_BLUR:
            warnings.append('the view is not sharp')
        figures['alike_elsewhere'] = elsewhere
        words = f'{elsewhere} points of the view are also found elsewhere in it'
        repeats = elsewhere >= REPEATS_SHARE * len(evidence.uv)
        if elsewhere and not repeats:
            warnings.append(f'parts repeat: {words}')
        elif elsewhere:
            return Verdict(f'the view repeats itself: {words}, so that another place '
                           'could be taken for the goal',
                           (), figures)
    return Verdict('', tuple(warnings), figures)


def pose_scatter(evidence: Evidence, noise: float, fx: float) -> tuple[Floats, float]:
    """Return the standard deviations (6,), m and rad, of the camera's pose, and L's condition."""
    known = np.isfinite(evidence.depths) & np.isfinite(evidence.scatter_px)
    if known.sum() < 4:
        return np.full(6, np.inf), np.inf
    x, y = evidence.xy[known].T
    inverse = 1 / evidence.depths[known]
    zero = np.zeros_like(x)
    rows = np.stack([
        np.stack([-inverse, zero, x * inverse, x * y, -(1 + x * x), y], axis=-1),
        np.stack([zero, -inverse, y * inverse, 1 + y * y, -x * y, -x], axis=-1)])
    # Goal and image are both noisy: the variance counts twice.
    sigma = np.maximum(evidence.scatter_px[known], 1e-4) * noise * np.sqrt(2) / fx
    scaled = (rows / sigma[:, None]).reshape(-1, 6)
    information = scaled.T @ scaled
    condition = float(np.linalg.cond(rows.reshape(-1, 6)))
    if not np.linalg.cond(information) < 1e14:
        return np.full(6, np.inf), condition
    return np.sqrt(np.diag(np.linalg.inv(information))), condition


def noise_of(view: Grey) -> float:
    """Return the standard deviation of the picture's noise, grey levels, at least 0.5."""
    response = cv2.filter2D(view.astype(np.float32), -1, _LAPLACIAN)[1:-1, 1:-1]
    return max(_MAD * float(np.median(np.abs(response))) / 6.0, _LEAST_NOISE)


def blur_of(view: Grey) -> float:
    """Return how little the view changes by blurring it by one pixel: 1 is blurred already."""
    smooth = cv2.GaussianBlur(view, (5, 5), 1.0).astype(np.float32)
    smoother = cv2.GaussianBlur(smooth, (7, 7), 1.0)
    energies = [float((cv2.Sobel(picture, cv2.CV_32F, 1, 0) ** 2
                       + cv2.Sobel(picture, cv2.CV_32F, 0, 1) ** 2).mean())
                for picture in (smooth, smoother)]
    return float(np.sqrt(energies[1] / max(energies[0], 1e-9)))
