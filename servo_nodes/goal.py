# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The taught view: what the camera must come back to, in memory and as a folder.

A goal on disk is a folder: `goal.yaml` (camera, plane, how it was taught, what was checked),
`view.png` (8 bit, grey) and, when the depth was measured, `depth.png` (16 bit, mm, 0 = unknown).
It is meant to be read, compared and mailed: nothing in it can run, and every size is bounded
before it is unpacked.
"""

from __future__ import annotations

import pathlib
import typing
from collections.abc import Mapping
from dataclasses import dataclass, field

import cv2
import numpy as np
import numpy.typing as npt
import yaml

from servo_nodes.camera import Camera
from servo_nodes.values import Floats

FORMAT = 1
LEAST_SIDE_PX, MOST_SIDE_PX = 16, 8192
MOST_YAML_BYTES, MOST_PNG_BYTES = 256 * 1024, 128 * 1024 * 1024
MOST_DEPTH_M = 65.535
_PNG_HEAD = b'\x89PNG\r\n\x1a\n'


@dataclass(frozen=True, eq=False)
class Goal:
    """A taught view.

    Attributes
    ----------
    view : (height, width), uint8, grey
    camera : Camera, which took it
    plane : (4,), nx, ny, nz, d of the target's plane n . X = d in the optical frame, |n| = 1, d >
        0, m depth : (height, width), float32, m, NaN where unknown; None when only the plane is
        known taught : str, how: by whom, from what checks : mapping, what was judged when it was
        taught: plain numbers and words
    """

    view: npt.NDArray[np.uint8]
    camera: Camera
    plane: Floats
    depth: npt.NDArray[np.float32] | None = None
    taught: str = ''
    checks: Mapping[str, typing.Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        view = np.array(self.view)
        size = (self.camera.height, self.camera.width)
        if view.dtype != np.uint8 or view.shape != size:
            raise ValueError(f'view: expected grey uint8 of {size[1]}x{size[0]} px as the camera '
                             f'has, got {view.dtype} of shape {view.shape}')
        if not (LEAST_SIDE_PX <= min(size) and max(size) <= MOST_SIDE_PX):
            raise ValueError(f'view: expected {LEAST_SIDE_PX} to {MOST_SIDE_PX} px a side, '
                             f'got {size[1]}x{size[0]}')
        view.setflags(write=False)
        object.__setattr__(self, 'view', view)
        object.__setattr__(self, 'plane', _checked_plane(self.plane))
        if self.depth is not None:
            depth = np.array(self.depth, dtype=np.float32)
            if depth.shape != size:
                raise ValueError(f'depth: expected {size[1]}x{size[0]} px as the view has, '
                                 f'got shape {depth.shape}')
            depth.setflags(write=False)
            object.__setattr__(self, 'depth', depth)


def save(goal: Goal, folder: str | pathlib.Path) -> None:
    """Write a goal into `folder`, made when absent; a former goal there is replaced.

    Raises
    ------
    ValueError
        When the folder cannot be written.
    """
    folder = pathlib.Path(folder)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _write_png(folder / 'view.png', goal.view)
        if goal.depth is not None:
            _write_png(folder / 'depth.png', _millimetres(goal.depth))
        else:
            (folder / 'depth.png').unlink(missing_ok=True)
        text = yaml.safe_dump(_page(goal), sort_keys=False, allow_unicode=True, width=99)
        (folder / 'goal.yaml').write_text(text, encoding='utf-8')
    except OSError as error:
        raise ValueError(f'{folder}: expected a place to write, got {error}') from error


def load(folder: str | pathlib.Path) -> Goal:
    """Return the goal of `folder`.

    Raises
    ------
    ValueError
        One sentence that names the file, for anything absent, malformed, contradictory or too
        large.
    """
    folder = pathlib.Path(folder)
    path = folder / 'goal.yaml'
    page = _read_page(path)
    try:
        camera = _camera_from_page(_part(page, 'camera', dict))
        plane = _part(page, 'plane', dict)
        numbers = [*_part(plane, 'normal', list), _part(plane, 'distance', (int, float))]
        taught, checks = _part(page, 'taught', str), page.get('checks') or {}
        if not isinstance(checks, dict):
            raise ValueError(f'checks: expected names and values, got {checks!r}')
        view = _read_png(folder / 'view.png', np.dtype(np.uint8), camera)
        depth = None
        if page.get('depth') is not None:
            raw = _read_png(folder / 'depth.png', np.dtype(np.uint16), camera)
            depth = np.where(raw > 0, raw / np.float32(1000), np.float32('nan')).astype(np.float32)
        return Goal(view, camera, _floats(numbers, 'plane'), depth, taught, checks)
    except ValueError as error:
        raise ValueError(f'{path}: {error}') from error


def png_size(data: bytes) -> tuple[int, int] | None:
    """Return (width, height), px, that a PNG announces in its head; None for no PNG."""
    if len(data) < 24 or data[:8] != _PNG_HEAD:
        return None
    return int.from_bytes(data[16:20], 'big'), int.from_bytes(data[20:24], 'big')


def _checked_plane(plane: npt.ArrayLike) -> Floats:
    numbers: Floats = np.array(plane, dtype=np.float64)
    if numbers.shape != (4,) or not np.isfinite(numbers).all():
        raise ValueError('plane: expected four finite numbers nx, ny, nz, d, '
                         f'got {numbers.tolist()}')
    length = float(np.linalg.norm(numbers[:3]))
    if not (0.99 < length < 1.01 and 1e-3 <= numbers[3] <= 1e3):
        raise ValueError('plane: expected a unit normal and a distance from 0.001 to 1000 m, '
                         f'got {numbers.tolist()}')
    numbers[:3] /= length
    numbers.setflags(write=False)
    return numbers


def _page(goal: Goal) -> dict[str, typing.Any]:
    camera = goal.camera
    return {
        'format': FORMAT,
        'taught': goal.taught,
        'camera': {
            'frame_id': camera.frame_id, 'width': camera.width, 'height': camera.height,
            'fx': camera.fx, 'fy': camera.fy, 'cx': camera.cx, 'cy': camera.cy,
            'model': camera.model, 'distortion': [float(d) for d in camera.distortion]},
        'plane': {'normal': goal.plane[:3].tolist(), 'distance': float(goal.plane[3])},
        'depth': None if goal.depth is None else 'depth.png',
        'checks': dict(goal.checks)}


def _read_page(path: pathlib.Path) -> dict[str, typing.Any]:
    data = _read_bytes(path, MOST_YAML_BYTES)
    try:
        page = yaml.safe_load(data.decode('utf-8'))
    except (yaml.YAMLError, UnicodeDecodeError, RecursionError, ValueError) as error:
        words = ' '.join(str(error).split())
        raise ValueError(f'{path}: expected YAML, got {words}') from error
    if not isinstance(page, dict):
        raise ValueError(f'{path}: expected names and values, got {type(page).__name__}')
    if page.get('format') != FORMAT:
        raise ValueError(f'{path}: expected format {FORMAT}, got {page.get("format")!r}')
    return page


def _camera_from_page(page: Mapping[str, typing.Any]) -> Camera:
    try:
        return Camera(
            width=_part(page, 'width', int), height=_part(page, 'height', int),
            fx=float(_part(page, 'fx', (int, float))), fy=float(_part(page, 'fy', (int, float))),
            cx=float(_part(page, 'cx', (int, float))), cy=float(_part(page, 'cy', (int, float))),
            model=_part(page, 'model', str), frame_id=_part(page, 'frame_id', str),
            distortion=tuple(_floats(_part(page, 'distortion', list), 'distortion').tolist()))
    except ValueError as error:
        raise ValueError(f'camera: {error}') from error


def _part(page: Mapping[str, typing.Any], name: str, kind: type | tuple[type, ...]) -> typing.Any:
    value = page.get(name)
    if not isinstance(value, kind) or isinstance(value, bool):
        kinds = kind if isinstance(kind, tuple) else (kind,)
        words = ' or '.join(kind.__name__ for kind in kinds)
        raise ValueError(f'{name}: expected {words}, got {value!r:.60}')
    return value


def _floats(numbers: list[typing.Any], name: str) -> Floats:
    if len(numbers) > 64 or not all(
            isinstance(n, (int, float)) and not isinstance(n, bool) for n in numbers):
        raise ValueError(f'{name}: expected numbers, got {numbers!r:.60}')
    return np.array(numbers, dtype=np.float64)


def _read_bytes(path: pathlib.Path, most: int) -> bytes:
    try:
        with path.open('rb') as file:
            data = file.read(most + 1)
    except OSError as error:
        raise ValueError(f'{path}: expected a readable file, got {error.strerror}') from error
    if len(data) > most:
        raise ValueError(f'{path}: expected at most {most} bytes, got more')
    return data


def _read_png(path: pathlib.Path, dtype: np.dtype[typing.Any],
              camera: Camera) -> npt.NDArray[typing.Any]:
    data = _read_bytes(path, MOST_PNG_BYTES)
    size = png_size(data)
    if size is None:
        raise ValueError(f'{path.name}: expected a PNG picture, got something else')
    if size != camera.size:
        raise ValueError(f'{path.name}: expected {camera.width}x{camera.height} px as the camera '
                         f'has, got {size[0]}x{size[1]}')
    if max(size) > MOST_SIDE_PX:
        raise ValueError(f'{path.name}: expected at most {MOST_SIDE_PX} px a side, '
                         f'got {size[0]}x{size[1]}')
    try:
        picture = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    except cv2.error:
        picture = None
    if picture is None or picture.dtype != dtype or picture.ndim != 2:
        got = 'a damaged one' if picture is None else f'{picture.dtype} of shape {picture.shape}'
        raise ValueError(f'{path.name}: expected a grey {dtype} picture, got {got}')
    return typing.cast(npt.NDArray[typing.Any], picture)


def _write_png(path: pathlib.Path, pixels: npt.NDArray[typing.Any]) -> None:
    ok, data = cv2.imencode('.png', pixels)
    if not ok:
        raise ValueError(f'{path}: expected a picture that PNG can hold, got {pixels.dtype}')
    path.write_bytes(data.tobytes())


def _millimetres(depth: npt.NDArray[np.float32]) -> npt.NDArray[np.uint16]:
    known = np.isfinite(depth) & (depth > 0) & (depth <= MOST_DEPTH_M)
    return np.where(known, np.round(np.where(known, depth, 0) * 1000), 0).astype(np.uint16)
