# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Does a view repeat itself, so that another place in it could be taken for the goal?

Keypoints are paired with those that resemble them elsewhere in the same view. What many pairs have
in common, a map or a mere displacement, is then put to the test that accepts a goal: are the
patches of the goal found there? A pattern of equal keypoints alone proves nothing (bricks resemble
one another in ORB's eyes, and are told apart by their patches).
"""

from __future__ import annotations

import numpy as np

from servo_nodes.tracking import consensus, follow, homography
from servo_nodes.tracking.follow import Limits
from servo_nodes.tracking.keypoints import Describer
from servo_nodes.tracking.reference import Reference
from servo_nodes.values import Floats

APART_PX = 24.0
_THRESHOLD_PX, _CELL_PX, _PEAKS, _LEAST_PAIRS = 3.0, 8, 3, 12


def alike_elsewhere(reference: Reference, describer: Describer, limits: Limits,
                    least: int) -> int:
    """Return how many points of a goal, `least` or more, are also found elsewhere in it."""
    camera, view = reference.goal.camera, reference.goal.view
    keypoints = reference.keypoints
    first, second = describer.match_elsewhere(keypoints, APART_PX)
    if len(first) < _LEAST_PAIRS:
        return 0
    away = keypoints.uv[second] - keypoints.uv[first]
    groups = [np.ones(len(first), bool), *_common(away)]
    found = 0
    for group in groups:
        mine, theirs = first[group], second[group]
        plane = consensus.plane_through(reference.keypoints_xy[mine],
                                        reference.keypoints_xy[theirs], _THRESHOLD_PX / camera.fx)
        if plane is None or np.count_nonzero(plane[1]) < _LEAST_PAIRS:
            continue
        matrix = homography.normed(plane[0], reference.keypoints_xy[mine][plane[1]])
        if matrix is None:
            continue
        sight = follow.verified(reference, camera, view, matrix, limits, rounds=3)
        if sight is None or np.linalg.norm(
                sight.uv - reference.uv[sight.index], axis=1).min() < APART_PX / 2:
            continue
        share = len(sight) / max(sight.expected, 1)
        if len(sight) >= least and share >= consensus.LEAST_SHARE and consensus.log10_chance(
                sight.expected, len(sight)) <= consensus.LOG10_ONCE_IN:
            found = max(found, len(sight))
    return found


def _common(away: Floats) -> list[np.ndarray[tuple[int], np.dtype[np.bool_]]]:
    """Return which pairs (N,) share each of the most frequent displacements (N, 2)."""
    cells = np.rint(away / _CELL_PX).astype(int)
    names, counts = np.unique(cells, axis=0, return_counts=True)
    peaks = names[np.argsort(-counts, kind='stable')[:_PEAKS]]
    return [(np.abs(cells - peak) <= 1).all(-1) for peak in peaks]
