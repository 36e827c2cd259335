# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faces through a lens: which texel each pixel sees, and how far away.

A face with pose T_CF = (R, t) maps its points (X, Y) to H (X, Y, 1) with H = [r1 r2 t], and
H (X, Y, 1) = z (x, y, 1). So for the ray (x, y, 1) of a pixel, inverse(H) (x, y, 1) =
(X, Y, 1) / z: its ratios are the place on the face, and its last entry is the inverse depth, by
which nearer faces hide farther ones. The rays carry the lens, exactly: every pixel's centre is
taken back through the distortion, once for each camera.

Shutter. The stamp of an image is the middle of the exposure of its middle row. Row r of h is
exposed (r - (h - 1)/2) readout/h later; each row is the mean over the exposure time around that.
Within one image each face keeps its velocity, so that at dt it stands at exp(-xi dt) T_CF when
the camera moves by xi relative to it.
"""

from __future__ import annotations

import functools
import math
import typing
from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.simulation.texture import Face, Level, Pixels
from servo_nodes.values import Floats

Field: typing.TypeAlias = npt.NDArray[np.float32]

MOST_SAMPLES = 25
_MOST_REFLECTIONS = 50
_NEAREST = 1e-3


class Rays(typing.NamedTuple):
    """Rays (h, w, 2), normalised, float32, and where the lens has none, (h, w), or None."""

    xy: Field
    blind: npt.NDArray[typing.Any] | None


@dataclass(frozen=True, eq=False)
class Placed:
    """A face before the camera: `T_CF` (4, 4), and the camera's twist (6,) relative to it."""

    face: Face
    T_CF: Floats
    twist: Floats


@dataclass(frozen=True)
class Shutter:
    """`exposure`, s, of each row, and `readout`, s, from the first row to the last."""

    exposure: float = 0.0
    readout: float = 0.0


@functools.lru_cache(maxsize=8)
def rays_of(camera: Camera) -> Rays:
    """Return the ray of every pixel's centre."""
    grid = np.stack(np.meshgrid(np.arange(camera.width), np.arange(camera.height)), axis=-1)
    xy = camera.normalised_from_pixels(grid)
    lost: npt.NDArray[typing.Any] = np.isnan(xy.sum(axis=-1))
    xy[lost] = 0.0
    return Rays(xy.astype(np.float32), lost if np.any(lost) else None)


def picture(placed: Sequence[Placed], camera: Camera, shutter: Shutter, *, grey: bool) -> Pixels:
    """Return what the camera sees, (h, w) or (h, w, 3), uint8; the first face is the backdrop."""
    if shutter == Shutter():
        image = _drawn(placed, camera, 0.0, 0.0, grey)
    else:
        count = _samples(placed, camera, shutter.exposure)
        offsets = ((np.arange(count) + 0.5) / count - 0.5) * shutter.exposure
        total = functools.reduce(np.add, (
            _drawn(placed, camera, float(offset), shutter.readout, grey).astype(np.uint16)
            for offset in offsets))
        image = ((total + count // 2) // count).astype(np.uint8)
    blind = rays_of(camera).blind
    if blind is not None:
        image[blind] = 0
    return image


def inverse_depths(placed: Sequence[Placed], camera: Camera) -> Field:
    """Return 1/z (h, w), 1/m, of the nearest face at the stamp; 0 where there is none."""
    nearest = np.zeros((camera.height, camera.width), np.float32)
    for one in placed:
        where = _box(one, camera, 0.0)
        if where is None:
            continue
        inverse = _inverse(one.T_CF)
        last = inverse[2].astype(np.float32)
        depth = rays_of(camera).xy[where] @ last[:2] + last[2]
        if not one.face.endless:
            level = one.face.texture.level_for(_footprint(one, camera), grey=True)
            texels = _texels(level, inverse, camera, where)
            depth[_coverage(texels, level) < 0.5] = 0
        nearest[where] = np.maximum(nearest[where], depth)
    blind = rays_of(camera).blind
    if blind is not None:
        nearest[blind] = 0
    return nearest


def middle_depth(one: Placed) -> float:
    """Return the depth, m, of a face along the optical axis; 0 where it is not ahead."""
    normal, offset = one.T_CF[:3, 2], one.T_CF[:3, 2] @ one.T_CF[:3, 3]
    return max(0.0, float(offset / normal[2])) if normal[2] > 0 else 0.0


def is_hidden(points_C: Floats, placed: Sequence[Placed]) -> npt.NDArray[np.bool_]:
    """Say which points (N, 3), m in the optical frame, lie behind one of the faces that end."""
    hidden = np.zeros(len(points_C), dtype=np.bool_)
    z = points_C[:, 2]
    for one in placed:
        if one.face.endless or not _faces_camera(one):
            continue
        seen = points_C / np.where(z > 0, z, np.nan)[:, None] @ _inverse(one.T_CF).T
        place = seen[:, :2] / seen[:, 2:]
        inside = (np.abs(place) <= (one.face.texture.width / 2,
                                    one.face.texture.height / 2)).all(axis=-1)
        hidden |= inside & (seen[:, 2] * z > 1 + _NEAREST)
    return hidden


def _faces_camera(one: Placed) -> bool:
    return bool(one.T_CF[:3, 2] @ one.T_CF[:3, 3] > 0)


def _drawn(placed: Sequence[Placed], camera: Camera, offset: float, readout: float,
           grey: bool) -> Pixels:
    """Return one instant (or one rolling sweep) at `offset`, s, from the stamp."""
    backdrop, *others = placed
    image = _backdrop(backdrop, camera, offset, readout, grey)
    nearest: Field | None = None
    for one in sorted(others, key=lambda each: -float(each.T_CF[2, 3])):
        where = _box(one, camera, abs(offset) + readout / 2)
        if where is None:
            continue
        inverse = _inverses(one, camera, offset, readout, where)
        if nearest is None:
            nearest = _depth_rows(_inverses(backdrop, camera, offset, readout, None), camera, None)
        level = one.face.texture.level_for(_footprint(one, camera), grey=grey)
        texels = _texels(level, inverse, camera, where)
        depth = _depth_rows(inverse, camera, where)
        cover = _coverage(texels, level) * (depth > nearest[where])
        _blend(image, where, _looked_up(level, texels), cover)
        nearest[where] = np.where(cover > 0.5, depth, nearest[where])
    return image


def _backdrop(one: Placed, camera: Camera, offset: float, readout: float, grey: bool) -> Pixels:
    level = one.face.texture.level_for(_footprint(one, camera), grey=grey)
    inverse = _inverses(one, camera, offset, readout, None)
    texels = _texels(level, inverse, camera, None)
    if _is_all_near(level, inverse, camera):
        return _looked_up(level, texels)
    # OpenCV mirrors step by step, without end for what lies near the horizon of the plane.
    far = _MOST_REFLECTIONS * max(level.pixels.shape[:2])
    # NumPy 1 widens here, and OpenCV looks up by single floats only.
    bounded = np.nan_to_num(np.clip(texels, -far, far)).astype(np.float32, copy=False)
    image = _looked_up(level, bounded)
    image[_depth_rows(inverse, camera, None) <= 0] = 0
    return image


def _inverses(one: Placed, camera: Camera, offset: float, readout: float,
              where: tuple[slice, slice] | None) -> Floats:
    """Return inverse(H), (3, 3), or (rows, 3, 3) when the shutter rolls."""
    T_CF = one.T_CF
    if readout == 0 and offset != 0:
        T_CF = motion.exp(-one.twist * offset) @ one.T_CF
    elif readout != 0:
        rows = np.arange(camera.height)[where[0] if where else slice(None)]
        times = offset + (rows - (camera.height - 1) / 2) * (readout / camera.height)
        T_CF = motion.exp(-one.twist * times[:, None]) @ one.T_CF
    return _inverse(T_CF)


def _inverse(T_CF: Floats) -> Floats:
    """Return inverse(H), (..., 3, 3)."""
    return np.asarray(np.linalg.inv(T_CF[..., :3, [0, 1, 3]]), dtype=np.float64)


def _texels(level: Level, inverse: Floats, camera: Camera,
            where: tuple[slice, slice] | None) -> Field:
    """Return the texel (h, w, 2) that each pixel sees."""
    xy = rays_of(camera).xy if where is None else np.ascontiguousarray(rays_of(camera).xy[where])
    matrix = level.texels_from_metres @ inverse
    if matrix.ndim == 2:
        seen: typing.Any = cv2.perspectiveTransform(xy, matrix)
        return typing.cast(Field, seen)
    rows = matrix.astype(np.float32)
    flat: Field = xy @ rows[:, :, :2].swapaxes(-1, -2) + rows[:, None, :, 2]
    return flat[..., :2] / flat[..., 2:]


def _depth_rows(inverse: Floats, camera: Camera, where: tuple[slice, slice] | None) -> Field:
    """Return 1/z (h, w); not positive behind the camera."""
    xy = rays_of(camera).xy if where is None else rays_of(camera).xy[where]
    last = inverse[..., 2, :].astype(np.float32)
    if last.ndim == 1:
        plain: Field = xy @ last[:2] + last[2]
        return plain
    rolling: Field = (xy * last[:, None, :2]).sum(axis=-1) + last[:, None, 2]
    return rolling


def _looked_up(level: Level, texels: Field) -> Pixels:
    unused: typing.Any = None
    image: Pixels = cv2.remap(level.pixels, texels, unused, cv2.INTER_LINEAR,
                              borderMode=cv2.BORDER_REFLECT_101)
    return image


def _coverage(texels: Field, level: Level) -> Field:
    """Return how much of each pixel (h, w) lies on a face that ends, 0..1, softly at its edge."""
    high, wide = level.pixels.shape[:2]
    u, v = texels[..., 0], texels[..., 1]
    inside = np.minimum(np.minimum(u + 0.5, wide - 0.5 - u), np.minimum(v + 0.5, high - 0.5 - v))
    cover: Field = np.clip(inside + np.float32(0.5), 0, 1)
    return np.nan_to_num(cover, nan=0.0)


def _blend(image: Pixels, where: tuple[slice, slice], over: Pixels, cover: Field) -> None:
    alpha = cover if image.ndim == 2 else cover[..., None]
    part = image[where].astype(np.float32)
    image[where] = (part + (over - part) * alpha + np.float32(0.5)).astype(np.uint8)


def _footprint(one: Placed, camera: Camera) -> float:
    """Return how much of the face, m, a pixel covers, where the face is nearest to the axis."""
    inverse = _inverse(one.T_CF)
    ray = np.array([0.0, 0.0, 1.0])
    if not one.face.endless and one.T_CF[2, 3] > _NEAREST:
        ray = one.T_CF[:3, 3] / one.T_CF[2, 3]
    x, y, w = inverse @ ray
    if w <= _NEAREST:
        return float(one.face.texture.pitch)
    jacobian = (inverse[:2, :2] - np.outer((x / w, y / w), inverse[2, :2])) / w
    return float(np.sqrt(abs(np.linalg.det(jacobian)) / (camera.fx * camera.fy)))


def _is_all_near(level: Level, inverse: Floats, camera: Camera) -> bool:
    """Whether every ray meets the plane, and not too far out; the border tells for the rest."""
    xy = rays_of(camera).xy
    border = np.concatenate([xy[0], xy[-1], xy[:, 0], xy[:, -1]])
    seen = np.column_stack([border, np.ones(len(border))]) @ np.swapaxes(
        level.texels_from_metres @ inverse, -1, -2)
    far = _MOST_REFLECTIONS * max(level.pixels.shape[:2])
    return bool((np.abs(seen[..., :2]) < far * seen[..., 2:]).all())


def _outline(one: Placed, camera: Camera, dt: float) -> Floats:
    """Return pixels (N, 2) along the border of a face at dt, s; NaN behind the camera."""
    texture, along = one.face.texture, np.linspace(-0.5, 0.5, 9)
    edge = np.concatenate([np.stack([along, np.full(9, side)], axis=-1) for side in (-0.5, 0.5)])
    points = np.zeros((36, 3))
    points[:18, :2], points[18:, :2] = edge, edge[:, ::-1]
    points[:, 0] *= texture.width
    points[:, 1] *= texture.height
    T_CF = motion.exp(-one.twist * dt) @ one.T_CF
    return camera.pixels_from_points(points @ T_CF[:3, :3].T + T_CF[:3, 3])


def _box(one: Placed, camera: Camera, spread: float) -> tuple[slice, slice] | None:
    """Return the part of the image a face can appear in within +-spread, s; None for nowhere."""
    if one.face.endless:
        return slice(0, camera.height), slice(0, camera.width)
    if not _faces_camera(one):
        return None
    pixels = np.concatenate([_outline(one, camera, dt) for dt in (-spread, spread)])
    if not np.isfinite(pixels).all():
        return slice(0, camera.height), slice(0, camera.width)
    low = np.maximum(np.floor(pixels.min(0)) - 2, 0).astype(int)
    high = np.minimum(np.ceil(pixels.max(0)) + 3, camera.size).astype(int)
    if (high <= low).any():
        return None
    return slice(low[1], high[1]), slice(low[0], high[0])


def _samples(placed: Sequence[Placed], camera: Camera, exposure: float) -> int:
    """Return how many instants make up an exposure: one for each half pixel of motion, and one."""
    fastest = 0.0
    for one in placed:
        moved = _outline(one, camera, exposure) - _outline(one, camera, 0.0)
        lengths = np.linalg.norm(moved, axis=-1)
        fastest = max(fastest, float(np.max(lengths[np.isfinite(lengths)], initial=0.0)))
    return min(MOST_SAMPLES, 1 + math.ceil(2 * fastest))
