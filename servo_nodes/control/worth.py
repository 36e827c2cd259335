# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What a view is worth: how surely its points tell where the camera is.

Pixel noise of sigma per coordinate (focal length f in px) scatters the camera pose that the points
imply with the covariance (sigma / f)^2 (L^T L)^-1 (least squares; Gauss). In a loop that removes
the share g of the error per image, the camera itself scatters by g / (2 - g) of that covariance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.control import interaction, least_squares
from servo_nodes.values import Floats

RANK_TOLERANCE = least_squares.RANK_TOLERANCE


@dataclass(frozen=True, eq=False)
class Worth:
    """What points tell about the camera.

    Attributes
    ----------
    values : (..., 6), singular values of the interaction matrix, descending
    covariance : (..., 6, 6), of the pose (m, rad; linear then angular); inf without full rank
    """

    values: Floats
    covariance: Floats

    @property
    def smallest(self) -> Floats:
        """Return the smallest singular value (...)."""
        return np.asarray(self.values[..., -1])

    @property
    def condition(self) -> Floats:
        """Return largest / smallest singular value (...); inf without full rank."""
        poor = self.smallest <= RANK_TOLERANCE * self.values[..., 0]
        return np.where(poor, np.inf, self.values[..., 0] / np.where(poor, 1.0, self.smallest))

    @property
    def scatter_mm(self) -> Floats:
        """Return standard deviations (..., 3) of the camera position along x, y, z, mm."""
        return 1e3 * np.sqrt(np.diagonal(self.covariance, axis1=-2, axis2=-1)[..., :3])

    @property
    def scatter_deg(self) -> Floats:
        """Return standard deviations (..., 3) of the camera attitude about x, y, z, degrees."""
        return np.degrees(np.sqrt(np.diagonal(self.covariance, axis1=-2, axis2=-1)[..., 3:]))


def worth(points_xy: npt.ArrayLike, depths: npt.ArrayLike, *, focal_px: float,
          noise_px: float = 1.0, weights: npt.ArrayLike | None = None,
          share_per_image: float | None = None) -> Worth:
    """Return what points are worth.

    Parameters
    ----------
    points_xy : (..., N, 2), normalised image coordinates
    depths : (..., N), m
    focal_px : float, px
    noise_px : float, standard deviation of a pixel coordinate
    weights : (..., N), 0..1
    share_per_image : float, g of the module's head: scatter in the loop; None: of one image
    """
    stack = interaction.points(points_xy, depths)
    if weights is not None:
        stack = stack * np.repeat(np.asarray(weights, dtype=np.float64), 2, axis=-1)[..., None]
    _, values, vt = np.linalg.svd(stack, full_matrices=stack.shape[-2] < 6)
    missing = np.zeros((*values.shape[:-1], 6 - values.shape[-1]))
    values = np.concatenate([values, missing], axis=-1)
    factor = (noise_px / focal_px) ** 2
    if share_per_image is not None:
        factor *= share_per_image / (2.0 - share_per_image)
    full = (values[..., -1] > RANK_TOLERANCE * values[..., 0])[..., None]
    inverse = np.where(full, factor / np.where(full, values, 1.0) ** 2, np.inf)
    with np.errstate(invalid='ignore'):
        covariance = np.einsum('...ki,...k,...kj->...ij', vt, inverse, vt)
    return Worth(values, np.where(full[..., None], covariance, np.inf))
