# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The camera: pinhole and lens models of CameraInfo, pixels <-> normalised coordinates.

With x = X/Z, y = Y/Z and r^2 = x^2 + y^2 (Brown's model as in OpenCV's documentation):

    plumb_bob            g = 1 + k1 r^2 + k2 r^4 + k3 r^6
    rational_polynomial  g = (1 + k1 r^2 + k2 r^4 + k3 r^6) / (1 + k4 r^2 + k5 r^4 + k6 r^6)
    xd = x g + 2 p1 x y + p2 (r^2 + 2 x^2),   yd = y g + p1 (r^2 + 2 y^2) + 2 p2 x y
    equidistant          theta = atan r,  theta_d = theta (1 + k1 theta^2 + ... + k4 theta^8),
                         (xd, yd) = (x, y) theta_d / r       (Kannala & Brandt 2006)

The inverse is iterated to convergence by Newton's method on the exact Jacobian. Where a model
folds back or has a pole there is no inverse to be trusted: those points come back as NaN. Pixel
(0, 0) is the centre of the first pixel.
"""

from __future__ import annotations

import functools
import typing
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from servo_nodes.values import Calibration, Floats

MODELS = {'plumb_bob': (0, 4, 5), 'rational_polynomial': (0, 8), 'equidistant': (0, 4)}
MAX_SIDE_PX = 16384
_ROUNDS = 30
_STEP_LIMIT = 0.3
_CLOSED = 1e-10
_LEAST_SLOPE = 1e-3
_LEAST_DENOMINATOR = 1e-3


@dataclass(frozen=True)
class Camera:
    """A calibrated camera, for the image as it is delivered (binning and roi applied).

    Attributes
    ----------
    width, height : int, px
    fx, fy, cx, cy : float, px
    model : str, a key of `MODELS`
    distortion : tuple of float, in CameraInfo's order; empty for none
    frame_id : str, optical frame
    """

    width: int
    height: int
    fx: float
    fy: float
    cx: float
    cy: float
    model: str = 'plumb_bob'
    distortion: tuple[float, ...] = ()
    frame_id: str = 'camera_optical_frame'

    def __post_init__(self) -> None:
        if not (1 <= self.width <= MAX_SIDE_PX and 1 <= self.height <= MAX_SIDE_PX):
            raise ValueError(f'camera size: expected 1 to {MAX_SIDE_PX} px a side, '
                             f'got {self.width}x{self.height}')
        numbers = (self.fx, self.fy, self.cx, self.cy, *self.distortion)
        if not np.isfinite(numbers).all():
            raise ValueError(f'calibration: expected finite numbers, got {numbers}')
        if not (self.fx > 0 and self.fy > 0):
            raise ValueError('calibration: expected a positive focal length, got '
                             f'fx = {self.fx:g}, fy = {self.fy:g} (k[0] = 0 means uncalibrated: '
                             'calibrate the camera and publish its camera_info)')
        if self.model not in MODELS:
            raise ValueError(f'distortion_model: expected one of {", ".join(MODELS)}, '
                             f'got {self.model!r}')
        if len(self.distortion) not in MODELS[self.model]:
            lengths = ' or '.join(map(str, MODELS[self.model]))
            raise ValueError(f'd: expected {lengths} numbers for {self.model}, '
                             f'got {len(self.distortion)}')

    @classmethod
    def from_calibration(cls, calibration: Calibration, *, rectified: bool = False) -> Camera:
        """Return the camera of the delivered image.

        Parameters
        ----------
        calibration : Calibration
        rectified : bool
            The images are already rectified: use `p`, and no distortion.

        Raises
        ------
        ValueError
            For an uncalibrated or contradictory calibration.
        """
        if rectified:
            if len(calibration.p) != 12:
                raise ValueError(f'p: expected 12 numbers, got {len(calibration.p)}')
            fx, cx, fy, cy = (calibration.p[i] for i in (0, 2, 5, 6))
        else:
            if len(calibration.k) != 9:
                raise ValueError(f'k: expected 9 numbers, got {len(calibration.k)}')
            fx, cx, fy, cy = (calibration.k[i] for i in (0, 2, 4, 5))
        bin_x, bin_y = (max(1, int(b)) for b in calibration.binning)
        left, top, wide, high = calibration.roi
        wide, high = wide or calibration.width, high or calibration.height
        if left + wide > calibration.width or top + high > calibration.height:
            raise ValueError(f'roi: expected a region inside {calibration.width}x'
                             f'{calibration.height} px, got {wide}x{high} at {left}, {top}')
        model = calibration.model or 'plumb_bob'
        return cls(width=wide // bin_x, height=high // bin_y, fx=fx / bin_x, fy=fy / bin_y,
                   cx=(cx - left) / bin_x, cy=(cy - top) / bin_y,
                   model='plumb_bob' if rectified else model,
                   distortion=() if rectified else _without_zero_tail(model, calibration.d),
                   frame_id=calibration.frame_id)

    @property
    def size(self) -> tuple[int, int]:
        """Return (width, height), px."""
        return self.width, self.height

    @functools.cached_property
    def is_pinhole(self) -> bool:
        """Whether the lens does nothing; `equidistant` bends rays even with zero coefficients."""
        return not self.distortion or (self.model != 'equidistant' and not any(self.distortion))

    @functools.cached_property
    def matrix(self) -> Floats:
        """Return the intrinsic matrix (3, 3)."""
        matrix = np.array([[self.fx, 0, self.cx], [0, self.fy, self.cy], [0, 0, 1.0]])
        matrix.setflags(write=False)
        return matrix

    def pixels_from_normalised(self, xy: npt.ArrayLike) -> Floats:
        """Return pixels (..., 2) of normalised undistorted coordinates (..., 2)."""
        distorted = self._distorted(np.asarray(xy, dtype=np.float64))
        return typing.cast(Floats, distorted * (self.fx, self.fy) + (self.cx, self.cy))

    def normalised_from_pixels(self, uv: npt.ArrayLike) -> Floats:
        """Return undistorted coordinates (..., 2) of pixels (..., 2); NaN without a sure one."""
        uv = np.asarray(uv, dtype=np.float64)
        target = (uv - (self.cx, self.cy)) / (self.fx, self.fy)
        if self.is_pinhole:
            return typing.cast(Floats, target)
        xy = self._undistorted(target.reshape(-1, 2)).reshape(uv.shape)
        # A lens model is fitted inside its image and says nothing far outside.
        far = ~((uv > -np.array(self.size)) & (uv < 2 * np.array(self.size))).all(-1)
        xy[far] = np.nan
        return xy

    def pixels_from_points(self, points_C: npt.ArrayLike) -> Floats:
        """Return pixels (..., 2) of points (..., 3), m in the optical frame; NaN where Z <= 0."""
        points_C = np.asarray(points_C, dtype=np.float64)
        z = points_C[..., 2:]
        ahead = z > 0
        xy = np.where(ahead, points_C[..., :2] / np.where(ahead, z, 1.0), np.nan)
        return self.pixels_from_normalised(xy)

    def pixel_jacobian(self, xy: npt.ArrayLike) -> Floats:
        """Return d(u, v)/d(x, y), (..., 2, 2), at normalised coordinates (..., 2)."""
        jacobian = self._distortion_and_jacobian(np.asarray(xy, dtype=np.float64))[1]
        return typing.cast(Floats, jacobian * np.array([[self.fx], [self.fy]]))

    def pixels_and_jacobian(self, xy: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return pixels (..., 2) and d(u, v)/d(x, y), (..., 2, 2), at normalised (..., 2)."""
        distorted, jacobian = self._distortion_and_jacobian(np.asarray(xy, dtype=np.float64))
        return (typing.cast(Floats, distorted * (self.fx, self.fy) + (self.cx, self.cy)),
                typing.cast(Floats, jacobian * np.array([[self.fx], [self.fy]])))

    def _distorted(self, xy: Floats) -> Floats:
        if self.is_pinhole:
            return xy
        if self.model == 'equidistant':
            r = np.hypot(xy[..., :1], xy[..., 1:])
            return typing.cast(Floats, xy * _fisheye_scale(r, self.distortion)[0])
        k1, k2, p1, p2, k3, k4, k5, k6 = self._padded
        x, y = xy[..., 0], xy[..., 1]
        s = x * x + y * y
        g = (1 + s * (k1 + s * (k2 + s * k3))) / (1 + s * (k4 + s * (k5 + s * k6)))
        return np.stack([x * g + 2 * p1 * x * y + p2 * (s + 2 * x * x),
                         y * g + p1 * (s + 2 * y * y) + 2 * p2 * x * y], axis=-1)

    @functools.cached_property
    def _padded(self) -> tuple[float, ...]:
        return (*self.distortion, *(0.0,) * (8 - len(self.distortion)))

    def _distortion_and_jacobian(self, xy: Floats) -> tuple[Floats, Floats]:
        """Return distorted coordinates (..., 2) and their Jacobian (..., 2, 2)."""
        x, y = xy[..., 0], xy[..., 1]
        jacobian = np.empty(xy.shape + (2,))
        if self.model == 'equidistant' and not self.is_pinhole:
            r = np.hypot(x, y)
            g, slope = _fisheye_scale(r, self.distortion)
            jacobian[..., 0, 0], jacobian[..., 1, 1] = g + x * x * slope, g + y * y * slope
            jacobian[..., 0, 1] = jacobian[..., 1, 0] = x * y * slope
            return xy * g[..., None], jacobian
        k1, k2, p1, p2, k3, k4, k5, k6 = self._padded
        s = x * x + y * y
        above, below = 1 + s * (k1 + s * (k2 + s * k3)), 1 + s * (k4 + s * (k5 + s * k6))
        g = above / below
        slope = 2 * (k1 + s * (2 * k2 + 3 * k3 * s) - g * (k4 + s * (2 * k5 + 3 * k6 * s))) / below
        jacobian[..., 0, 0] = g + x * x * slope + 2 * p1 * y + 6 * p2 * x
        jacobian[..., 1, 1] = g + y * y * slope + 6 * p1 * y + 2 * p2 * x
        jacobian[..., 0, 1] = jacobian[..., 1, 0] = x * y * slope + 2 * p1 * x + 2 * p2 * y
        return self._distorted(xy), jacobian

    def _undistorted(self, target: Floats) -> Floats:
        """Invert the lens by Newton's method; `target` (N, 2) is distorted, normalised."""
        xy = self._first_guess(target)
        with np.errstate(all='ignore'):
            for _ in range(_ROUNDS):
                value, jacobian = self._distortion_and_jacobian(xy)
                residual = value - target
                if not np.nanmax(np.abs(residual), initial=0.0) > _CLOSED * 1e-3:
                    break
                step = _solved_2x2(jacobian, residual)
                length = np.linalg.norm(step, axis=-1, keepdims=True)
                limit = _STEP_LIMIT * (1 + np.linalg.norm(xy, axis=-1, keepdims=True))
                xy = xy - step * np.minimum(1.0, limit / np.maximum(length, 1e-30))
            value, jacobian = self._distortion_and_jacobian(xy)
            sure = (np.abs(value - target).max(-1) < _CLOSED) & self._has_inverse(xy, jacobian)
        xy[~sure] = np.nan
        return xy

    def _first_guess(self, target: Floats) -> Floats:
        if self.model != 'equidistant':
            return np.array(target)
        # theta_d is nearly theta: start on the ray of the ideal lens, but in front of the camera.
        r = np.linalg.norm(target, axis=-1, keepdims=True)
        stretch = np.where(r > 1e-9, np.tan(np.minimum(r, 1.5)) / np.maximum(r, 1e-9), 1.0)
        return typing.cast(Floats, target * stretch)

    def _has_inverse(self, xy: Floats, jacobian: Floats) -> npt.NDArray[np.bool_]:
        determinant = (jacobian[:, 0, 0] * jacobian[:, 1, 1] - jacobian[:, 0, 1] ** 2)
        trace = jacobian[:, 0, 0] + jacobian[:, 1, 1]
        turned_right = (determinant > _LEAST_SLOPE ** 2) & (trace > 0)
        s = (xy ** 2).sum(-1)
        if self.model == 'rational_polynomial':
            k4, k5, k6 = self._padded[5:]
            below = np.abs(1 + s * (k4 + s * (k5 + s * k6)))
            return typing.cast(npt.NDArray[np.bool_], turned_right & (below > _LEAST_DENOMINATOR))
        return typing.cast(npt.NDArray[np.bool_], turned_right & (s < self.fold_radius ** 2))

    @functools.cached_property
    def fold_radius(self) -> float:
        """Return the normalised radius at which the radial model folds back; inf for none.

        For `rational_polynomial` the tangent poles and zeros are judged point by point instead.
        """
        if self.model != 'plumb_bob' or not any(self.distortion):
            return float('inf')
        k1, k2, _, _, k3 = self._padded[:5]
        roots = np.roots([7 * k3, 5 * k2, 3 * k1, 1.0])
        real = roots[np.abs(roots.imag) < 1e-12].real
        positive = real[real > 0]
        return float(np.sqrt(positive.min())) if positive.size else float('inf')


def _fisheye_scale(r: Floats, k: tuple[float, ...]) -> tuple[Floats, Floats]:
    """Return g = theta_d / r and (dg/dr) / r, with the series at the axis."""
    k1, k2, k3, k4 = k
    near = r < 1e-4
    safe = np.where(near, 1.0, r)
    theta = np.arctan(safe)
    t = theta * theta
    theta_d = theta * (1 + t * (k1 + t * (k2 + t * (k3 + t * k4))))
    rate = (1 + t * (3 * k1 + t * (5 * k2 + t * (7 * k3 + t * 9 * k4)))) / (1 + safe * safe)
    g = np.where(near, 1 + (k1 - 1 / 3) * r * r, theta_d / safe)
    slope = np.where(near, 2 * (k1 - 1 / 3), (rate - theta_d / safe) / (safe * safe))
    return g, slope


def _solved_2x2(matrix: Floats, right: Floats) -> Floats:
    a, b, c, d = matrix[..., 0, 0], matrix[..., 0, 1], matrix[..., 1, 0], matrix[..., 1, 1]
    x, y = right[..., 0], right[..., 1]
    determinant = a * d - b * c
    determinant = np.where(np.abs(determinant) < 1e-12, np.nan, determinant)
    return np.stack([(d * x - b * y) / determinant, (a * y - c * x) / determinant], axis=-1)


def _without_zero_tail(model: str, d: tuple[float, ...]) -> tuple[float, ...]:
    """Return `d` at a length its model knows: drivers pad with zeros, or send none at all."""
    lengths = MODELS.get(model, (len(d),))
    longest = max(lengths)
    if len(d) > longest and not any(d[longest:]):
        return d[:longest]
    return d
