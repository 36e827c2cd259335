# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Sub-pixel registration of patches of the goal view in another image, gain and offset included.

Around a point q the goal shows T(o), o an offset from q. The image shows the same surface as I(u +
A o) = a T(o + e) + b, where u is the present guess of the point, A the local map of pixels, a and
b gain and offset of this patch (exposure, shading, glare) and e the guess' error in goal pixels.
To first order I = a T + b + a e . grad T = J c with c = (a e_x, a e_y, a, b): linear, with a
matrix J that depends on the goal alone. So each round is one sampling of the image and one product
with a pseudo-inverse made when the goal was taken up; then u <- u - A e. Nothing is carried over
from the image before: the points cannot drift. With weights W the part of the picture that J c
explains has the energy c^T (J^T W J) c, whose share of the energy of I about its mean is the
squared correlation of patch and goal.

Source: the inverse compositional scheme of Baker & Matthews 2004 (IJCV 56), gain and offset as in
Lucas & Kanade 1981, sec. 5 (from memory, re-derived).
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import Floats

RADIUS = 10
# The window's standard deviation in radii: wide, for the sake of noise; not flat, for that of
# relief.
_WINDOW = 1.2
# cv2.remap rounds coordinates to this share of a pixel; so do we, knowingly.
_GRAIN = 32.0
_MIDDLE_GREY = np.float32(128)
_LEAST_GAIN, _MOST_GAIN = 0.1, 10.0
_LEAST_ENERGY = 1.0
# A last step of this length leaves an error of the second order, some thousandths of a pixel.
_ENOUGH_PX = 0.1
MOST_STEP_PX = 3.0
Singles = npt.NDArray[np.float32]
Index = npt.NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class Registration:
    """Where patches were found, `uv` (N, 2) px, and their correlation with the goal (N,)."""

    uv: Floats
    likeness: Floats


class Patches:
    """Patches of a goal view, prepared for registration.

    Parameters
    ----------
    view : (height, width), uint8, the goal
    uv : (N, 2), px, whole numbers, at least RADIUS + 1 from the border

    Attributes
    ----------
    scatter_px : (N,), standard deviation of a registered coordinate for grey noise of one level
    """

    def __init__(self, view: Grey, uv: Floats) -> None:
        span = np.arange(-RADIUS, RADIUS + 1)
        du, dv = (axis.ravel() for axis in np.meshgrid(span, span))
        self._offsets: Singles = np.stack([du, dv, np.ones_like(du)]).astype(np.float32)
        columns, rows = np.rint(uv).astype(int).T
        u, v = columns[:, None] + du, rows[:, None] + dv
        light = view.astype(np.float32) - _MIDDLE_GREY
        template = light[v, u]
        model = np.stack([(light[v, u + 1] - light[v, u - 1]) / 2,
                          (light[v + 1, u] - light[v - 1, u]) / 2,
                          template, np.ones_like(template)], axis=-1).astype(np.float64)
        window = np.exp(-(du ** 2 + dv ** 2) / (2 * (_WINDOW * RADIUS) ** 2))
        window /= window.sum()
        weighted = model * window[:, None]
        normal = weighted.transpose(0, 2, 1) @ model
        solver = np.linalg.pinv(normal, hermitian=True) @ weighted.transpose(0, 2, 1)
        self._window: Singles = window.astype(np.float32)
        self._normal: Singles = normal.astype(np.float32)
        self._solver: Singles = np.ascontiguousarray(solver, dtype=np.float32)
        self.scatter_px: Floats = np.sqrt((solver[:, :2] ** 2).sum((1, 2)) / 2)

    def __len__(self) -> int:
        return len(self._solver)

    def register(self, grey: Grey, uv: Floats, local: Floats, index: Index, *,
                 rounds: int) -> Registration:
        """Refine where the patches `index` are in an image.

        Parameters
        ----------
        grey : (height, width), uint8
        uv : (M, 2), px, guesses, right to about 3 px
        local : (M, 2, 2), change of the image's pixels with the goal's
        index : (M,), which patches
        rounds : int, at least 1, the most; one is enough where the guesses were good

        Returns
        -------
        Registration
            Likeness -1 where a patch leaves the image, or its step or gain is senseless.
        """
        good = _inside(grey.shape, uv, local)
        # Usually all are wanted: then nothing is copied.
        solver = self._solver if len(index) == len(self) else self._solver[index]
        first = at = np.where(good[:, None], uv, RADIUS)
        # One product makes all sampling positions: rows u then v of (A | u) times (o, 1).
        place = np.empty((2, len(at), 3), np.float32)
        place[:, :, :2] = local.transpose(1, 0, 2)
        most = int(0.9 * (len(at) - 1))
        for _ in range(rounds):
            at = np.rint(at * _GRAIN) / _GRAIN
            place[:, :, 2] = at.T
            u, v = (place.reshape(-1, 3) @ self._offsets).reshape(2, len(at), -1)
            shown = cv2.remap(grey, u, v, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
            light: Singles = shown.astype(np.float32) - _MIDDLE_GREY
            numbers = (solver @ light[:, :, None])[:, :, 0]
            gain = numbers[:, 2]
            good &= (_LEAST_GAIN <= gain) & (gain <= _MOST_GAIN)
            error = numbers[:, :2] / np.where(good, gain, 1.0)[:, None]
            np.clip(error, -MOST_STEP_PX, MOST_STEP_PX, out=error)
            steps = np.abs(error).max(-1)
            at = at - np.where(good[:, None], (local @ error[:, :, None])[:, :, 0], 0.0)
            if np.partition(steps, most)[most] < _ENOUGH_PX:
                break
        good &= np.abs(at - first).max(-1) <= MOST_STEP_PX * rounds
        return Registration(at, np.where(good, self._likeness(light, numbers, index), -1.0))

    def _likeness(self, light: Singles, numbers: Singles, index: Index) -> Floats:
        mean = light @ self._window
        energy = (light * light) @ self._window - mean * mean
        explained = ((numbers[:, None, :] @ self._normal[index])[:, 0] * numbers).sum(-1)
        share = (explained - mean * mean) / np.maximum(energy, _LEAST_ENERGY)
        return typing.cast(Floats, np.sqrt(np.clip(share, 0.0, 1.0)).astype(np.float64))


def _inside(shape: tuple[int, ...], uv: Floats, local: Floats) -> npt.NDArray[np.bool_]:
    # The corners of a patch reach farthest, whatever its local map.
    reach = RADIUS * np.abs(local).sum(-1)
    with np.errstate(invalid='ignore'):
        inside = (uv >= reach) & (uv <= (shape[1] - 1, shape[0] - 1) - reach)
    return typing.cast(npt.NDArray[np.bool_], inside.all(-1))
