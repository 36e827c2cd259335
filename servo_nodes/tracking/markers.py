# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Fiducials: markers and ChArUco boards found by OpenCV, whose size tells depth.

OpenCV 4.7 replaced the functions of its aruco module by classes; `_Detector` is the only place
that knows. A marker is a square of known side, so four corners give its pose (IPPE: Collins &
Bartoli, IJCV 109, 2014), in general with two minima. The second is judged: where it explains the
corners nearly as well, depth is the mean of both and the marker is called ambiguous.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.goal import Goal
from servo_nodes.tracking import homography
from servo_nodes.tracking.follow import Sight
from servo_nodes.tracking.options import MarkerOptions
from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import Floats

CLEAR_RATIO = 2.0
CORNER_FLOOR_PX = 0.1
_REFINE_SHARE, _LEAST_REFINE_PX, _MOST_REFINE_PX = 0.08, 2, 7
Ids = npt.NDArray[np.uint32]


@dataclass(frozen=True, eq=False)
class Corners:
    """Corners in one picture: `ids` (N,), `uv` (N, 2) px, `groups` (N,) which rigid square."""

    ids: Ids
    uv: Floats
    groups: npt.NDArray[np.intp]

    def __len__(self) -> int:
        return len(self.ids)


@dataclass(frozen=True, eq=False)
class SquarePose:
    """A pose `T_CM` (4, 4) in the camera, its rms `error`, normalised, and its rival."""

    T_CM: Floats
    error: float
    rival: Floats | None
    rival_error: float

    @property
    def is_ambiguous(self) -> bool:
        """Say whether the second minimum explains the corners nearly as well."""
        return self.rival is not None and self.rival_error < CLEAR_RATIO * max(self.error, 1e-5)


class Markers:
    """Finds the corners the options describe; corner k of marker m has the id 4 m + k."""

    def __init__(self, options: MarkerOptions) -> None:
        self._side = options.side
        self._detector = _Detector(options)

    def corners(self, grey: Grey) -> Corners:
        """Return the corners in a picture, refined; a marker seen twice counts as not seen."""
        if self._detector.is_board:
            ids, uv = self._detector.board_corners(grey)
            return Corners(ids, uv, np.zeros(len(ids), np.intp))
        found, squares = self._detector.squares(grey)
        names, counts = np.unique(found, return_counts=True)
        once = np.isin(found, names[counts == 1])
        found, squares = found[once], squares[once]
        order = np.argsort(found, kind='stable')
        found = found[order]
        uv = np.array([_refined(grey, square) for square in squares[order]]).reshape(-1, 2)
        ids = (4 * found[:, None] + np.arange(4)).reshape(-1).astype(np.uint32)
        return Corners(ids, uv, np.repeat(np.arange(len(found)), 4))

    def depths(self, corners: Corners, xy: Floats) -> Floats:
        """Return the depth (N,), m, of every corner from the size of its square or board."""
        depths = np.full(len(corners), np.nan)
        for name in np.unique(corners.groups):
            own = corners.groups == name
            points = self._detector.points_of(corners.ids[own], self._side)
            pose = pose_of_plane(points, xy[own])
            if pose is None:
                continue
            there = points @ pose.T_CM[2, :3] + pose.T_CM[2, 3]
            if pose.is_ambiguous and pose.rival is not None:
                there = (there + points @ pose.rival[2, :3] + pose.rival[2, 3]) / 2
            depths[own] = there
        return depths


class MarkerReference:
    """The markers of a goal view; the attributes are those of `reference.Reference`."""

    def __init__(self, goal: Goal, markers: Markers) -> None:
        self.goal = goal
        corners = markers.corners(goal.view)
        xy = goal.camera.normalised_from_pixels(corners.uv)
        depths = markers.depths(corners, xy)
        sure = np.isfinite(xy).all(-1)
        self.uv: Floats = corners.uv[sure]
        self.xy: Floats = xy[sure]
        self.ids: Ids = corners.ids[sure]
        self.depths: Floats = depths[sure]

    def __len__(self) -> int:
        return len(self.ids)


class MarkerFinder:
    """Finds a goal by its markers: each image is searched, nothing is carried over."""

    def __init__(self, reference: MarkerReference, camera: Camera, markers: Markers) -> None:
        self._reference, self._camera, self._markers = reference, camera, markers

    def find(self, grey: Grey, brightness: float) -> tuple[Sight | None, str]:
        """Return the goal's markers in an image, and in words what was done, or why not."""
        del brightness
        reference, camera = self._reference, self._camera
        corners = self._markers.corners(grey)
        xy = camera.normalised_from_pixels(corners.uv)
        depths = self._markers.depths(corners, xy)
        _, mine, theirs = np.intersect1d(
            reference.ids, corners.ids, assume_unique=True, return_indices=True)
        sure = np.isfinite(xy[theirs, 0])
        mine, theirs = mine[sure], theirs[sure]
        if len(mine) < 4:
            return None, f"goal not found: {len(corners) // 4} markers seen, none of the goal's"
        xy, goal_xy = xy[theirs], reference.xy[mine]
        lens = np.linalg.inv(camera.pixel_jacobian(xy)).astype(np.float64)
        fit = homography.robust_fit(goal_xy, xy, floor=CORNER_FLOOR_PX / camera.fx)
        matrix = None if fit is None else homography.normed(fit.matrix, goal_xy)
        if fit is None or matrix is None:
            return None, 'goal not found: its markers make no view a camera can have'
        sight = Sight(matrix, mine, corners.uv[theirs], xy, lens, np.ones(len(mine)),
                      homography.middle(fit.residuals) * camera.fx, len(reference),
                      depths[theirs])
        return sight, 'markers'

    def lose(self) -> None:
        """Forget nothing: there is nothing carried over."""


def pose_of_plane(points: Floats, xy: Floats) -> SquarePose | None:
    """Return the pose of coplanar points (N, 3), m, z = 0, seen at normalised `xy` (N, 2).

    Both minima of IPPE are kept, the better first; None when neither lies before the camera.
    """
    if len(xy) < 4 or not np.isfinite(xy).all():
        return None
    try:
        _, turns, shifts, errors = cv2.solvePnPGeneric(
            np.ascontiguousarray(points), np.ascontiguousarray(xy), np.eye(3), None,
            flags=cv2.SOLVEPNP_IPPE)[:4]
    except cv2.error:
        return None
    poses = [(float(np.asarray(error).reshape(-1)[0]), motion.pose_from_parts(
        motion.rotation_from_vector(np.asarray(turn).reshape(3)), np.asarray(shift).reshape(3)))
        for turn, shift, error in zip(turns, shifts, errors, strict=True)]
    poses = sorted((pair for pair in poses if np.isfinite(pair[1]).all() and pair[1][2, 3] > 0),
                   key=lambda pair: pair[0])
    if not poses:
        return None
    rival = poses[1] if len(poses) > 1 else (np.inf, None)
    return SquarePose(poses[0][1], poses[0][0], rival[1], rival[0])


def _refined(grey: Grey, square: Floats) -> Floats:
    """Return the corners (4, 2) of a square, sub-pixel, with a window that fits its size."""
    side = float(np.linalg.norm(np.diff(square, axis=0, append=square[:1]), axis=1).min())
    reach = int(np.clip(_REFINE_SHARE * side, _LEAST_REFINE_PX, _MOST_REFINE_PX))
    corners = np.ascontiguousarray(square, dtype=np.float32).reshape(-1, 1, 2)
    criteria = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 50, 0.001)
    found = cv2.cornerSubPix(grey, corners, (reach, reach), (-1, -1), criteria)
    uv = np.asarray(found, dtype=np.float64).reshape(-1, 2)
    far = np.abs(uv - square).max(-1) > reach
    uv[far] = square[far]
    return typing.cast(Floats, uv)


class _Detector:
    """OpenCV's aruco module, functions before 4.7 and classes since."""

    def __init__(self, options: MarkerOptions) -> None:
        aruco: typing.Any = getattr(cv2, 'aruco', None)
        if aruco is None:
            raise ValueError('detector.kind: expected an OpenCV with its aruco module for marker, '
                             f'got {cv2.__version__} without; install a newer one')
        self._aruco = aruco
        self._modern = hasattr(aruco, 'ArucoDetector')
        self._dictionary = aruco.getPredefinedDictionary(_constant(aruco, options.dictionary))
        self._parameters = (aruco.DetectorParameters() if self._modern
                            else aruco.DetectorParameters_create())
        self.is_board = bool(options.board)
        if self._modern:
            self._plain = aruco.ArucoDetector(self._dictionary, self._parameters)
        if self.is_board:
            columns, rows, square = int(options.board[0]), int(options.board[1]), options.board[2]
            self._columns, self._square = columns, square
            if self._modern:
                board = aruco.CharucoBoard((columns, rows), square, options.side, self._dictionary)
                self._charuco = aruco.CharucoDetector(board)
            else:
                self._board = aruco.CharucoBoard_create(columns, rows, square, options.side,
                                                        self._dictionary)

    def squares(self, grey: Grey) -> tuple[npt.NDArray[np.int64], Floats]:
        """Return ids (M,) and corners (M, 4, 2), px, clockwise from each marker's own top left."""
        corners, ids = (self._plain.detectMarkers(grey) if self._modern else
                        self._aruco.detectMarkers(grey, self._dictionary,
                                                  parameters=self._parameters))[:2]
        if ids is None or not len(corners):
            return np.empty(0, np.int64), np.empty((0, 4, 2))
        return (np.asarray(ids, dtype=np.int64).reshape(-1),
                np.asarray(corners, dtype=np.float64).reshape(-1, 4, 2))

    def board_corners(self, grey: Grey) -> tuple[Ids, Floats]:
        """Return ids (N,) and pixels (N, 2) of the inner corners of the board."""
        if self._modern:
            uv, ids = self._charuco.detectBoard(grey)[:2]
        else:
            squares, names = self._aruco.detectMarkers(grey, self._dictionary,
                                                       parameters=self._parameters)[:2]
            uv, ids = None, None
            if names is not None and len(squares):
                _, uv, ids = self._aruco.interpolateCornersCharuco(squares, names, grey,
                                                                   self._board)
        if ids is None or uv is None:
            return np.empty(0, np.uint32), np.empty((0, 2))
        return (np.asarray(ids).reshape(-1).astype(np.uint32),
                np.asarray(uv, dtype=np.float64).reshape(-1, 2))

    def points_of(self, ids: Ids, side: float) -> Floats:
        """Return where corners lie on their square or board, (N, 3), m, z = 0."""
        points = np.zeros((len(ids), 3))
        if self.is_board:
            across = self._columns - 1
            points[:, 0] = (ids % across + 1) * self._square
            points[:, 1] = (ids // across + 1) * self._square
            return points
        half = side / 2
        square = np.array([[-half, half], [half, half], [half, -half], [-half, -half]])
        points[:, :2] = square[ids % 4]
        return points


def _constant(aruco: typing.Any, name: str) -> int:
    """Return OpenCV's number of a dictionary; 4.x and 5.x differ in the case of the letter."""
    wanted = 'DICT_' + name.upper()
    for known in dir(aruco):
        if known.upper() == wanted:
            return int(getattr(aruco, known))
    raise ValueError(f'marker.dictionary: expected one this OpenCV knows, got {name!r}')
