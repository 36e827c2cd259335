# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""How far from home a camera is, judged by the goal alone and not by the law that leads there.

Close to the goal e = s - s* = -L* x, where x is the motion (m, rad) that is left and L* the
interaction matrix at the goal (Chaumette & Hutchinson 2006, from memory). It rests on the goal's
own depths. A law may be damped, masked or misled by wrong depths and then ask for less than is
left; this does not.
"""

from __future__ import annotations

import numpy as np

from servo_nodes.control import interaction
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.values import View

OUTLYING = 4.0
LEAST_PX = 1e-6


def motion_left(view: View, settings: ControllerSettings) -> list[float]:
    """Return the motion that is left, 6 numbers, m and rad, to first order.

    Parameters
    ----------
    view : View, good and close to the goal
    settings : ControllerSettings, whose caps.axes leave out what the camera may not do

    Points whose error is several times the median are left out: close to the goal they are wild.
    """
    error = view.points_xy - view.goal_xy
    length = np.hypot(error[:, 0], error[:, 1])
    trust = view.weights * (length <= OUTLYING * float(np.median(length)) + LEAST_PX)
    depths = np.where(view.goal_depths > 0, view.goal_depths, settings.law.depth.fallback)
    rows = np.repeat(trust, 2)
    stack = interaction.points(view.goal_xy, depths) * rows[:, None]
    left = np.linalg.lstsq(stack, -rows * error.reshape(-1), rcond=1e-9)[0]
    return [axis * part for axis, part in zip(settings.caps.axes, left.tolist(), strict=True)]
