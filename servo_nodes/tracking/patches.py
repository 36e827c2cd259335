# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Sub-pixel registration of patches of the goal view in another image, gain and offset included.

Around a point q the goal shows T(o), o an offset from q. The image shows the same surface as
I(u + A o) = a T(o + e) + b, where u is the present guess of the point, A the local map of pixels, a and b
gain and offset of this patch (exposure, shading, glare) and e the guess' error in goal pixels. To first
order I = a T + b + a e . grad T: linear in (a e_x, a e_y, a, b), with a matrix that depends on the goal
alone. So each round is one sampling of the image and one product with a pseudo-inverse made when the
goal was taken up; then u <- u - A e. The last residual gives the correlation of patch and goal. Nothing
is carried over from the image before: the points cannot drift.

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

RADIUS = 8
BLUR_PX = 1.0
# cv2.remap rounds coordinates to this share of a pixel; so do we, knowingly.
_GRAIN = 32.0
_LEAST_GAIN, _MOST_GAIN = 0.1, 10.0
_MOST_STEP_PX = 3.0
Singles = npt.NDArray[np.float32]


@dataclass(frozen=True, eq=False)
class Registration:
    """Where patches were found: `uv` (N, 2) px, `likeness` (N,) correlation with the goal, -1..1."""

    uv: Floats
    likeness: Floats


class Patches:
    """Patches of a goal view, prepared for registration.

    Parameters
    ----------
    soft : (height, width), uint8, the goal after `softened`
    uv : (N, 2), px, whole numbers, at least RADIUS + 1 from the border
    """

    def __init__(self, soft: Grey, uv: Floats) -> None:
        span = np.arange(-RADIUS, RADIUS + 1)
        du, dv = (axis.ravel() for axis in np.meshgrid(span, span))
        self._offsets: Singles = np.stack([du, dv], axis=-1).astype(np.float32)
        columns, rows = np.rint(uv).astype(int).T
        u, v = columns[:, None] + du, rows[:, None] + dv
        view = soft.astype(np.float32)
        template = view[v, u]
        gradient_u = (view[v, u + 1] - view[v, u - 1]) / 2
        gradient_v = (view[v + 1, u] - view[v - 1, u]) / 2
        window = np.exp(-(du ** 2 + dv ** 2) / (2 * (0.75 * RADIUS) ** 2))
        self._window: Singles = (window / window.sum()).astype(np.float32)
        self._model: Singles = np.stack(
            [gradient_u, gradient_v, template, np.ones_like(template)], axis=-1)
        weighted = self._model * window[:, None].astype(np.float32)
        normal = np.einsum('npi,npj->nij', weighted, self._model).astype(np.float64)
        inverse = np.linalg.pinv(normal, hermitian=True)
        self._solver: Singles = np.ascontiguousarray(
            np.einsum('nij,npj->nip', inverse, weighted)).astype(np.float32)
        # Covariance of e for unit noise: S S^T, with S the solver's first two rows.
        spread = np.einsum('nip,njp->nij', self._solver[:, :2], self._solver[:, :2])
        self.scatter_px: Floats = np.sqrt(np.trace(spread, axis1=1, axis2=2) / 2).astype(float)

    def __len__(self) -> int:
        return len(self._solver)

    def register(self, soft: Grey, uv: Floats, local: Floats, index: npt.NDArray[np.intp], *,
                 rounds: int) -> Registration:
        """Refine where the patches `index` are in an image.

        Parameters
        ----------
        soft : (height, width), uint8, the image after `softened`
        uv : (M, 2), px, guesses, right to about 3 px
        local : (M, 2, 2), change of the image's pixels with the goal's
        index : (M,), which patches
        rounds : int, at least 1

        Returns
        -------
        Registration
            Likeness -1 where a patch leaves the image, or its step or gain is senseless.
        """
        solver, model = self._solver[index], self._model[index]
        reach = self._offsets @ local.transpose(0, 2, 1).astype(np.float32)
        good = _inside(soft.shape, uv, reach)
        at = np.where(good[:, None], uv, RADIUS)
        first = at
        likeness = np.zeros(len(at))
        for turn in range(rounds):
            at = np.round(at * _GRAIN) / _GRAIN
            sampled = cv2.remap(soft, reach + at[:, None, :].astype(np.float32), None,
                                cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
            shown = sampled.astype(np.float32)[:, :, None]
            numbers = solver @ shown
            gain = numbers[:, 2, 0].astype(np.float64)
            good = good & (_LEAST_GAIN <= gain) & (gain <= _MOST_GAIN)
            error = numbers[:, :2, 0] / np.where(good, gain, 1.0)[:, None]
            length = np.sqrt((error ** 2).sum(-1))
            error = error * np.minimum(1.0, _MOST_STEP_PX / np.maximum(length, 1e-9))[:, None]
            at = at - np.where(good[:, None], (local @ error[:, :, None])[:, :, 0], 0.0)
            if turn == rounds - 1:
                likeness = self._correlation(shown[:, :, 0], model, numbers)
        moved = np.sqrt(((at - first) ** 2).sum(-1))
        good &= moved < _MOST_STEP_PX * rounds
        return Registration(at, np.where(good, likeness, -1.0))

    def _correlation(self, shown: Singles, model: Singles, numbers: Singles) -> Floats:
        residual = shown - (model @ numbers)[:, :, 0]
        mean = shown @ self._window
        energy = ((shown - mean[:, None]) ** 2) @ self._window
        share = (residual ** 2) @ self._window / np.maximum(energy, 1e-3)
        return np.sqrt(np.clip(1.0 - share, 0.0, 1.0)).astype(np.float64)


def softened(grey: Grey) -> Grey:
    """Return the image slightly blurred: linear interpolation and noise then cost less."""
    return typing.cast(Grey, cv2.GaussianBlur(grey, (5, 5), BLUR_PX))


def _inside(shape: tuple[int, ...], uv: Floats, reach: Singles) -> npt.NDArray[np.bool_]:
    # The corners of a patch reach farthest, whatever its local map.
    corner = np.abs(reach[:, (0, 2 * RADIUS)]).max(1)
    with np.errstate(invalid='ignore'):
        inside = (uv >= corner) & (uv <= (shape[1] - 1, shape[0] - 1) - corner)
    return typing.cast(npt.NDArray[np.bool_], inside.all(-1))
