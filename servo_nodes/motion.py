# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Rigid motions: exponential, logarithm, adjoint and the transport of twists.

With xi = (v, w), theta = |w| and [w] the skew matrix of w,

    exp(xi) = [R, J v; 0, 1],  R = I + A [w] + B [w]^2,  J = I + B [w] + C [w]^2,
    A = sin(theta)/theta,  B = (1 - cos(theta))/theta^2,  C = (theta - sin(theta))/theta^3,

and J is the left Jacobian of SO(3). Below `SMALL_ANGLE` the coefficients come from their series.
Source: Murray, Li & Sastry, A Mathematical Introduction to Robotic Manipulation, 1994, ch. 2;
Barfoot, State Estimation for Robotics, 2017, ch. 7 (formulas from memory, re-derived).

`T_AB` is the pose of frame B in frame A, (..., 4, 4): it takes coordinates in B to A. A camera
whose twist xi in its own frame is constant moves by `T_WC <- T_WC @ exp(xi dt)`. Everything
broadcasts over leading axes. This is the only file that knows the order of a quaternion.
"""

from __future__ import annotations

import typing

import numpy as np
import numpy.typing as npt

from servo_nodes.values import Floats

SMALL_ANGLE = 1e-2


def skew(w: npt.ArrayLike) -> Floats:
    """Return the matrices (..., 3, 3) of the cross product w x, for w (..., 3)."""
    w = np.asarray(w, dtype=np.float64)
    matrix = np.zeros(w.shape + (3,))
    matrix[..., 0, 1], matrix[..., 0, 2] = -w[..., 2], w[..., 1]
    matrix[..., 1, 0], matrix[..., 1, 2] = w[..., 2], -w[..., 0]
    matrix[..., 2, 0], matrix[..., 2, 1] = -w[..., 1], w[..., 0]
    return matrix


def _coefficients(w: Floats) -> tuple[Floats, Floats, Floats]:
    """Return A, B, C of the module's head, each (..., 1, 1)."""
    square = np.einsum('...i,...i->...', w, w)[..., None, None]
    theta = np.sqrt(square)
    small = theta < SMALL_ANGLE
    safe = np.where(small, 1.0, theta)
    half = np.sin(0.5 * safe) / (0.5 * safe)
    a = np.where(small, 1 - square / 6 * (1 - square / 20 * (1 - square / 42)),
                 np.sin(safe) / safe)
    b = np.where(small, 0.5 - square / 24 * (1 - square / 30 * (1 - square / 56)), 0.5 * half ** 2)
    c = np.where(small, 1 / 6 - square / 120 * (1 - square / 42 * (1 - square / 72)),
                 (safe - np.sin(safe)) / safe ** 3)
    return a, b, c


def rotation_from_vector(w: npt.ArrayLike) -> Floats:
    """Return the rotations (..., 3, 3) by the rotation vectors w (..., 3), rad (Rodrigues)."""
    w = np.asarray(w, dtype=np.float64)
    a, b, _ = _coefficients(w)
    cross = skew(w)
    return typing.cast(Floats, np.eye(3) + a * cross + b * (cross @ cross))


def vector_from_rotation(rotation: npt.ArrayLike) -> Floats:
    """Return the rotation vectors (..., 3), rad, at most pi long; at pi either sign is right."""
    w, xyz = _quaternion_parts(np.asarray(rotation, dtype=np.float64))
    sine = np.linalg.norm(xyz, axis=-1, keepdims=True)
    half = np.arctan2(sine, w[..., None])
    small = sine < 1e-6
    factor = np.where(small, 2 / np.maximum(w[..., None], 0.5) * (1 + sine ** 2 / 6),
                      2 * half / np.where(small, 1.0, sine))
    return typing.cast(Floats, factor * xyz)


def _quaternion_parts(rotation: Floats) -> tuple[Floats, Floats]:
    """Return the scalar (>= 0) and vector part by Shepperd's method: divide by the largest."""
    diagonal = np.diagonal(rotation, axis1=-2, axis2=-1)
    trace = diagonal.sum(-1)
    candidates = np.empty(rotation.shape[:-2] + (4, 4))
    x, y, z = 0, 1, 2
    off = {(i, j): rotation[..., i, j] for i in range(3) for j in range(3)}
    plus = {(i, j): off[i, j] + off[j, i] for i in range(3) for j in range(3)}
    wx, wy, wz = off[z, y] - off[y, z], off[x, z] - off[z, x], off[y, x] - off[x, y]
    rows = ((1 + trace, wx, wy, wz),
            (wx, 1 - trace + 2 * diagonal[..., x], plus[x, y], plus[x, z]),
            (wy, plus[x, y], 1 - trace + 2 * diagonal[..., y], plus[y, z]),
            (wz, plus[x, z], plus[y, z], 1 - trace + 2 * diagonal[..., z]))
    for i, row in enumerate(rows):
        for j, entry in enumerate(row):
            candidates[..., i, j] = entry
    best = np.argmax(np.diagonal(candidates, axis1=-2, axis2=-1), axis=-1)
    quaternion = np.take_along_axis(candidates, best[..., None, None], axis=-2)[..., 0, :]
    quaternion /= np.linalg.norm(quaternion, axis=-1, keepdims=True)
    quaternion = np.where(quaternion[..., :1] < 0, -quaternion, quaternion)
    return quaternion[..., 0], quaternion[..., 1:]


def left_jacobian(w: npt.ArrayLike) -> Floats:
    """Return J (..., 3, 3) of the module's head for rotation vectors w (..., 3)."""
    w = np.asarray(w, dtype=np.float64)
    _, b, c = _coefficients(w)
    cross = skew(w)
    return typing.cast(Floats, np.eye(3) + b * cross + c * (cross @ cross))


def left_jacobian_inverse(w: npt.ArrayLike) -> Floats:
    """Return J^-1 (..., 3, 3): I - [w]/2 + D [w]^2, D = 1/theta^2 - cot(theta/2)/(2 theta)."""
    w = np.asarray(w, dtype=np.float64)
    square = np.einsum('...i,...i->...', w, w)[..., None, None]
    small = square < SMALL_ANGLE ** 2
    safe = np.where(small, 1.0, np.sqrt(square))
    d = np.where(small, 1 / 12 + square / 720 * (1 + square / 42),
                 1 / safe ** 2 - 1 / (2 * safe * np.tan(0.5 * safe)))
    cross = skew(w)
    return typing.cast(Floats, np.eye(3) - 0.5 * cross + d * (cross @ cross))


def pose_from_parts(rotation: npt.ArrayLike, translation: npt.ArrayLike) -> Floats:
    """Return poses (..., 4, 4) from rotations (..., 3, 3) and translations (..., 3), m."""
    rotation = np.asarray(rotation, dtype=np.float64)
    translation = np.asarray(translation, dtype=np.float64)
    lead = np.broadcast_shapes(rotation.shape[:-2], translation.shape[:-1])
    pose = np.zeros(lead + (4, 4))
    pose[..., :3, :3] = rotation
    pose[..., :3, 3] = translation
    pose[..., 3, 3] = 1.0
    return pose


def exp(xi: npt.ArrayLike) -> Floats:
    """Return the motions (..., 4, 4) of twists times time, xi (..., 6) = (v, w), m and rad."""
    xi = np.asarray(xi, dtype=np.float64)
    v, w = xi[..., :3], xi[..., 3:]
    translation = np.einsum('...ij,...j->...i', left_jacobian(w), v)
    return pose_from_parts(rotation_from_vector(w), translation)


def log(pose: npt.ArrayLike) -> Floats:
    """Return xi (..., 6) with exp(xi) = pose; the rotation part is of length at most pi."""
    pose = np.asarray(pose, dtype=np.float64)
    w = vector_from_rotation(pose[..., :3, :3])
    v = np.einsum('...ij,...j->...i', left_jacobian_inverse(w), pose[..., :3, 3])
    return np.concatenate([v, w], axis=-1)


def inverse(pose: npt.ArrayLike) -> Floats:
    """Return the inverse motions (..., 4, 4)."""
    pose = np.asarray(pose, dtype=np.float64)
    transposed = np.swapaxes(pose[..., :3, :3], -1, -2)
    translation = -np.einsum('...ij,...j->...i', transposed, pose[..., :3, 3])
    return pose_from_parts(transposed, translation)


def adjoint(T_AB: npt.ArrayLike) -> Floats:
    """Return Ad (..., 6, 6) that takes a twist in B to the same motion expressed in A.

    With T_AB = (R, p): v_A = R v_B + p x (R w_B), w_A = R w_B.
    """
    T_AB = np.asarray(T_AB, dtype=np.float64)
    rotation, p = T_AB[..., :3, :3], T_AB[..., :3, 3]
    matrix = np.zeros(T_AB.shape[:-2] + (6, 6))
    matrix[..., :3, :3] = rotation
    matrix[..., 3:, 3:] = rotation
    matrix[..., :3, 3:] = skew(p) @ rotation
    return matrix


def transport(T_AB: npt.ArrayLike, twist_B: npt.ArrayLike) -> Floats:
    """Return the twists (..., 6) in A of the motions `twist_B` (..., 6) given in B."""
    return typing.cast(Floats, np.einsum('...ij,...j->...i', adjoint(T_AB),
                                         np.asarray(twist_B, dtype=np.float64)))


def angle_between(rotation_a: npt.ArrayLike, rotation_b: npt.ArrayLike) -> Floats:
    """Return the angles (...), rad, of the rotation from a to b."""
    relative = np.swapaxes(np.asarray(rotation_a), -1, -2) @ np.asarray(rotation_b)
    return typing.cast(Floats, np.linalg.norm(vector_from_rotation(relative), axis=-1))


def rotation_from_quaternion(xyzw: npt.ArrayLike) -> Floats:
    """Return the rotation (3, 3) of a quaternion (x, y, z, w), which need not be of unit length.

    Raises
    ------
    ValueError
        When the quaternion is not four finite numbers or has no length.
    """
    quaternion = np.asarray(xyzw, dtype=np.float64)
    length = float(np.linalg.norm(quaternion))
    if quaternion.shape != (4,) or not 1e-6 <= length < np.inf:
        raise ValueError('quaternion: expected finite numbers of unit length, 4 of them, '
                         f'got {xyzw!r}')
    x, y, z, w = quaternion
    return typing.cast(Floats, _transforms3d().quat2mat(np.array([w, x, y, z]) / length))


def quaternion_from_rotation(rotation: npt.ArrayLike) -> Floats:
    """Return the quaternion (4,) as x, y, z, w with w >= 0 of a rotation (3, 3)."""
    w, x, y, z = _transforms3d().mat2quat(np.asarray(rotation, dtype=np.float64))
    return np.array([x, y, z, w])


def pose_from_numbers(numbers: npt.ArrayLike) -> Floats:
    """Return the pose (4, 4) of x, y, z, qx, qy, qz, qw."""
    numbers = np.asarray(numbers, dtype=np.float64)
    if numbers.shape != (7,) or not np.isfinite(numbers).all():
        raise ValueError(f'pose: expected 7 finite numbers x y z qx qy qz qw, got {numbers!r}')
    return pose_from_parts(rotation_from_quaternion(numbers[3:]), numbers[:3])


def _transforms3d() -> typing.Any:
    """Import late: releases below 0.4.2 break on NumPy 2 and would take every importer along."""
    try:
        from transforms3d import quaternions
    except (ImportError, AttributeError) as error:
        raise ImportError('transforms3d: expected 0.4.2 or newer (pip install '
                          '"transforms3d>=0.4.2" or apt install python3-transforms3d), '
                          f'got: {error}') from error
    return quaternions
