# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Caps on twists: speeds, steps and braking, with one ratio for all six components.

Scaling the whole twist keeps its direction, and with it the path of the camera. A linear speed is
judged where it matters: at the camera and, through the adjoint of the rigid tool, at the tool,

    v_T = R v + p x (R w),   w_T = R w,

whose lever arm p turns a harmless turn of the camera into a fast move of the tool. Everything
broadcasts over leading axes, so that ten thousand starts pass the very same caps as the live loop.
"""

from __future__ import annotations

import typing

import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats

_AT_REST = 1e-9


def speeds(twists: npt.ArrayLike, tool: Floats | None = None) -> tuple[Floats, Floats]:
    """Return linear and angular speed (...), the linear one at the faster of camera and tool.

    Parameters
    ----------
    twists : (..., 6), camera in its optical frame
    tool : (6, 6), adjoint that takes them to the tool; None when the camera is all that counts
    """
    twists = np.asarray(twists, dtype=np.float64)
    v, w = twists[..., :3], twists[..., 3:]
    linear = np.einsum('...i,...i->...', v, v)
    if tool is not None:
        at_tool = twists @ tool[:3].T
        linear = np.maximum(linear, np.einsum('...i,...i->...', at_tool, at_tool))
    return np.sqrt(linear), np.sqrt(np.einsum('...i,...i->...', w, w))


def ratios(twists: npt.ArrayLike, *, linear: npt.ArrayLike, angular: npt.ArrayLike,
           tool: Floats | None = None) -> Floats:
    """Return the largest ratios (...) in 0..1 that bring the twists inside both caps.

    A twist that is not finite, or so large that its square is not, gets the ratio 0.
    """
    linear, angular = np.asarray(linear), np.asarray(angular)
    with np.errstate(over='ignore', invalid='ignore'):
        v, w = speeds(twists, tool)
        ratio = np.minimum(linear / np.maximum(v, linear), angular / np.maximum(w, angular))
    return typing.cast(Floats, np.where((v < np.inf) & (w < np.inf), ratio, 0.0))


def scaled(twists: npt.ArrayLike, *, linear: npt.ArrayLike, angular: npt.ArrayLike,
           tool: Floats | None = None) -> Floats:
    """Return the twists (..., 6) inside the caps, direction kept; what is not finite rests.

    Parameters
    ----------
    twists : (..., 6), camera in its optical frame, m/s and rad/s
    linear, angular : (...), caps, m/s and rad/s
    tool : (6, 6), see `speeds`
    """
    twists = np.asarray(twists, dtype=np.float64)
    ratio = ratios(twists, linear=linear, angular=angular, tool=tool)[..., None]
    return typing.cast(Floats, np.where(ratio > 0, ratio * np.where(ratio > 0, twists, 0.0), 0.0))


def slewed(previous: npt.ArrayLike, wanted: npt.ArrayLike, *, linear_step: npt.ArrayLike,
           angular_step: npt.ArrayLike, tool: Floats | None = None) -> Floats:
    """Return twists (..., 6) on the way from `previous` to `wanted`, at most one step away.

    Parameters
    ----------
    previous, wanted : (..., 6)
    linear_step, angular_step : (...), acceleration times interval, m/s and rad/s
    tool : (6, 6), see `speeds`
    """
    previous = np.asarray(previous, dtype=np.float64)
    change = np.asarray(wanted, dtype=np.float64) - previous
    return previous + scaled(change, linear=linear_step, angular=angular_step, tool=tool)


def braked(previous: npt.ArrayLike, *, linear_step: npt.ArrayLike, angular_step: npt.ArrayLike,
           tool: Floats | None = None) -> Floats:
    """Return twists (..., 6) one step nearer to exact rest, direction kept.

    The part that takes longer to stop sets the pace; what is not finite rests at once.
    """
    previous = np.asarray(previous, dtype=np.float64)
    with np.errstate(over='ignore', invalid='ignore'):
        v, w = speeds(previous, tool)
        steps = np.maximum(v / np.asarray(linear_step), w / np.asarray(angular_step))
    ratio = 1.0 - 1.0 / np.maximum(steps, 1.0)
    left = np.where((steps > 1.0 + _AT_REST) & (steps < np.inf), ratio, 0.0)[..., None]
    return typing.cast(Floats, np.where(left > 0, left * np.where(left > 0, previous, 0.0), 0.0))
