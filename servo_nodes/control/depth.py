# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Depth from the camera's own motion, for points nobody gives a depth for.

With chi = 1/Z the motion of a point splits into a known part and one that is linear in chi,

    ds/dt = f_m + Omega chi,     Omega = (x vz - vx, y vz - vy),
    dchi/dt = vz chi^2 + (y wx - x wy) chi = f_u,

and the observer (De Luca, Oriolo & Robuffo Giordano 2008; Spica & Robuffo Giordano 2013, from
memory)

    d s'/dt   = f_m + Omega chi' + 2 sqrt(a) |Omega| (s - s'),
    d chi'/dt = f_u + a Omega . (s - s')

converges like (1 + w t) exp(-w t) with w = sqrt(a) |Omega|: as fast as the camera translates
across the ray, and not at all when it stands or only turns. Then chi' stays what it was.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.control import interaction
from servo_nodes.values import Floats

_LONGEST_STEP = 0.01


@dataclass(frozen=True, eq=False)
class Observed:
    """Estimates of points: `points_xy` (..., 2), normalised, and `inverse` (...), 1/m."""

    points_xy: Floats
    inverse: Floats

    @property
    def depths(self) -> Floats:
        """Return the depths (...), m."""
        return 1.0 / self.inverse


def _rates(points_xy: Floats, state: Observed, twist: Floats,
           gain: float) -> tuple[Floats, Floats]:
    x, y = points_xy[..., 0], points_xy[..., 1]
    rows = interaction.points(points_xy[..., None, :], np.ones((*x.shape, 1)))
    omega = rows[..., :3] @ twist[:3]
    turning = rows[..., 3:] @ twist[3:]
    left = points_xy - state.points_xy
    speed = np.linalg.norm(omega, axis=-1)[..., None]
    chi = state.inverse
    ds = turning + omega * chi[..., None] + 2 * np.sqrt(gain) * speed * left
    dchi = twist[2] * chi * chi + (y * twist[3] - x * twist[4]) * chi
    return ds, dchi + gain * (omega * left).sum(-1)


def observed(state: Observed, before_xy: Floats, after_xy: Floats, twist: npt.ArrayLike, *,
             duration: float, gain: float, nearest: float, farthest: float) -> Observed:
    """Return the estimates after the points moved from `before_xy` to `after_xy` (..., 2).

    Parameters
    ----------
    state : Observed, at the beginning
    twist : (6,), m/s and rad/s, of the camera in its optical frame meanwhile
    duration : float, s
    gain : float, `a` of the module's head, 1/m^2
    nearest, farthest : float, m, bounds of the estimate
    """
    twist = np.asarray(twist, dtype=np.float64)
    steps = max(1, int(np.ceil(duration / _LONGEST_STEP)))
    dt = duration / steps
    for k in range(steps):
        start = before_xy + (after_xy - before_xy) * (k / steps)
        middle = before_xy + (after_xy - before_xy) * ((k + 0.5) / steps)
        ds, dchi = _rates(start, state, twist, gain)
        half = Observed(state.points_xy + 0.5 * dt * ds, state.inverse + 0.5 * dt * dchi)
        ds, dchi = _rates(middle, half, twist, gain)
        inverse = np.minimum(np.maximum(state.inverse + dt * dchi, 1 / farthest), 1 / nearest)
        state = Observed(state.points_xy + dt * ds, typing.cast(Floats, inverse))
    return state
