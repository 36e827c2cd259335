# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A goal made ready for tracking: its points, their patches and depths, its keypoints."""

from __future__ import annotations

import numpy as np

from servo_nodes.goal import Goal
from servo_nodes.tracking import patches
from servo_nodes.tracking.depth import depths_of_goal
from servo_nodes.tracking.keypoints import Describer, Keypoints, strong_points
from servo_nodes.values import Floats

MARGIN = patches.RADIUS + 2


class Reference:
    """What of a goal stays the same from image to image.

    Attributes
    ----------
    uv : (N, 2), px, points of the goal view that are followed
    ids : (N,), uint32, their numbers in views
    xy : (N, 2), normalised
    depths : (N,), m, NaN where unknown
    from_pixels : (N, 2, 2), d(x, y)/d(u, v) of the goal's lens at the points
    patches : Patches
    keypoints : Keypoints, for finding the goal anew
    keypoints_xy : normalised coordinates of these
    """

    def __init__(self, goal: Goal, *, points: int, describer: Describer) -> None:
        self.goal = goal
        uv = strong_points(goal.view, points, MARGIN)
        xy = goal.camera.normalised_from_pixels(uv)
        sure = np.isfinite(xy).all(-1)
        self.uv: Floats = uv[sure]
        self.xy: Floats = xy[sure]
        self.ids = np.arange(len(self.uv), dtype=np.uint32)
        self.depths: Floats = depths_of_goal(goal, self.uv, self.xy)
        self.from_pixels: Floats = np.linalg.inv(
            goal.camera.pixel_jacobian(self.xy)).astype(np.float64)
        self.patches = patches.Patches(goal.view, self.uv)
        keypoints = describer.describe(goal.view)
        keypoints_xy = goal.camera.normalised_from_pixels(keypoints.uv)
        sure = np.isfinite(keypoints_xy).all(-1)
        self.keypoints = Keypoints(keypoints.uv[sure], keypoints.descriptors[sure])
        self.keypoints_xy: Floats = keypoints_xy[sure]

    def __len__(self) -> int:
        return len(self.uv)
