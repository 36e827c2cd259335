# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Depths of points: from the goal's plane or map, or from a depth image with its holes and edges.

On the plane n . X = d a ray (x, y, 1) has the depth Z = d / (n . (x, y, 1)). Depth cameras invent
points between a near and a far surface ("flying pixels") and lose others: a depth counts when the
neighbourhood holds enough values and they agree.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import numpy as np

from servo_nodes.goal import Goal
from servo_nodes.tracking.pictures import Metres
from servo_nodes.values import Floats

_REACH_PX = 2
_LEAST_KNOWN = 0.5
_MOST_SPREAD = 0.03
_TRIPLES, _TUKEY_ROUNDS = 300, 5


def depths_on_plane(plane: Floats, xy: Floats) -> Floats:
    """Return depths (N,), m, of rays (N, 2) on `plane` (nx, ny, nz, d); NaN where they miss it."""
    slope = xy @ plane[:2] + plane[2]
    with np.errstate(divide='ignore', invalid='ignore'):
        depth = plane[3] / slope
    return typing.cast(Floats, np.where(slope > 1e-6, depth, np.nan))


def depths_in_image(metres: Metres, uv: Floats) -> Floats:
    """Return depths (N,), m, at pixels (N, 2): the median around; NaN in holes and at edges.

    At least half of the 5x5 neighbourhood must be known and lie, from its 10th to its 90th
    percentile, within 3 % of the median: across an edge no value is right.
    """
    depths = np.full(len(uv), np.nan)
    height, width = metres.shape
    with np.errstate(invalid='ignore'):
        inside = ((uv > -0.5) & (uv < (width - 0.5, height - 0.5))).all(-1)
    if not inside.any():
        return depths
    at = np.rint(uv[inside]).astype(int)
    span = np.arange(-_REACH_PX, _REACH_PX + 1)
    rows = np.clip(at[:, 1, None, None] + span[:, None], 0, height - 1)
    columns = np.clip(at[:, 0, None, None] + span, 0, width - 1)
    values = np.sort(metres[rows, columns].reshape(len(at), -1).astype(np.float64), axis=1)
    known = np.isfinite(values).sum(1)
    enough = known >= _LEAST_KNOWN * values.shape[1]
    last = np.maximum(known - 1, 0)
    line = np.arange(len(at))
    median = (values[line, last // 2] + values[line, (last + 1) // 2]) / 2
    low, high = values[line, np.rint(0.1 * last).astype(int)], values[
        line, np.rint(0.9 * last).astype(int)]
    with np.errstate(invalid='ignore'):
        agree = high - low <= _MOST_SPREAD * median
    depths[inside] = np.where(enough & agree, median, np.nan)
    return depths


def depths_of_goal(goal: Goal, uv: Floats, xy: Floats) -> Floats:
    """Return depths (N,), m, of points of a goal: its map where there is one, else its plane."""
    if goal.depth is not None:
        return depths_in_image(goal.depth, uv)
    return depths_on_plane(goal.plane, xy)


@dataclass(frozen=True, eq=False)
class Depths:
    """Depths now and in the goal, (N,), m, NaN where unknown, and where they come from."""

    now: Floats
    goal: Floats
    source: str


def chosen(source: str, *, ratios: Floats, goal: Floats, constant: float, found: Floats | None,
           measured: Floats | None) -> Depths:
    """Choose each point's depth by `source`, a word of `depth.source`.

    Parameters
    ----------
    ratios : (N,), depth now over depth in the goal, by the change of the view
    goal : (N,), m, depth in the goal
    constant : float, m, `teach.distance`
    found : (N,), m, what the finder measured (marker size), or None
    measured : (N,), m, from a depth image, or None
    """
    unknown = np.full(len(ratios), np.nan)
    if source == 'none':
        return Depths(unknown, unknown, 'none')
    if source == 'constant':
        fixed = np.full(len(ratios), constant)
        return Depths(fixed, fixed, 'constant')
    options = {'image': measured, 'marker': found, 'goal': goal * ratios}
    wanted = {'auto': ('image', 'marker', 'goal'), 'image': ('image',),
              'goal': ('marker', 'goal')}[source]
    now, words = unknown, []
    for name in wanted:
        value = options[name]
        missing = np.isnan(now)
        if value is None or not missing.any():
            continue
        now = np.where(missing, value, now)
        count = int(np.count_nonzero(missing & np.isfinite(now)))
        if count:
            words.append(f'{name} {count}')
    return Depths(now, goal, ', '.join(words) or 'none')


def plane_in_depth(metres: Metres, xy: Floats, uv: Floats) -> tuple[Floats, float] | None:
    """Fit n . X = d to the depths at rays `xy` (N, 2), pixels `uv`.

    On a plane the inverse depth is linear in the ray, 1/Z = (n / d) . (x, y, 1). The start is the
    plane through three points whose median distance is least (Rousseeuw 1984), so that other
    surfaces in the picture do not count; Tukey's weights refine it.

    Returns
    -------
    (plane, deviation) or None
        The plane (4,) and the median distance of the points from it, m; None for fewer than six
        known depths or a plane that does not face the camera.
    """
    depths = depths_in_image(metres, uv)
    known = np.isfinite(depths)
    if known.sum() < 6:
        return None
    rays = np.concatenate([xy[known], np.ones((int(known.sum()), 1))], axis=1)
    depths = depths[known]
    slope = _least_median(rays, depths)
    if slope is None:
        return None
    for _ in range(_TUKEY_ROUNDS):
        distance = np.abs(depths * (rays @ slope) - 1)
        scale = max(1.4826 * float(np.median(distance)), 1e-4)
        root = 1 - np.minimum(distance / (4.685 * scale), 1.0) ** 2
        slope = np.linalg.lstsq(rays * root[:, None], root / depths, rcond=None)[0]
    length = float(np.linalg.norm(slope))
    if not slope[2] > 0.05 * length:
        return None
    distance = np.abs(depths * (rays @ slope) - 1)
    return np.append(slope, 1.0) / length, float(np.median(distance)) / length


def _least_median(rays: Floats, depths: Floats) -> Floats | None:
    """Return the slope (3,) through three of the points that leaves the least median residual."""
    # Steps of irrational share visit the points evenly: nothing random, nothing twice the same.
    turns = np.arange(1, _TRIPLES + 1)[:, None] * np.sqrt([2.0, 3.0, 5.0])
    triples = ((turns % 1.0) * len(rays)).astype(int)
    corners = rays[triples]
    usable = np.abs(np.linalg.det(corners)) > 1e-6
    if not usable.any():
        return None
    slopes = np.linalg.solve(corners[usable], 1 / depths[triples[usable]][:, :, None])[:, :, 0]
    residuals = np.median(np.abs(depths * (slopes @ rays.T) - 1), axis=1)
    return np.asarray(slopes[np.argmin(residuals)], dtype=np.float64)
