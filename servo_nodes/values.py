# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The nouns that cross rooms: frozen values without behaviour of their own.

Times are integer nanoseconds of one clock per run. Twists are ordered linear, angular and are
those of the camera, relative to the target's world, expressed in the optical frame (x right, y
down, z forward; REP 103). Arrays handed to a value are copied, cast and made read-only.
"""

from __future__ import annotations

import enum
import typing
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

Stamp: typing.TypeAlias = int
Floats: typing.TypeAlias = npt.NDArray[np.float64]

SECOND_NS = 1_000_000_000


class State(enum.Enum):
    """What the controller is doing; the words of the state topic."""

    STANDBY = 'standby'
    SERVOING = 'servoing'
    HOLDING = 'holding'
    SETTLED = 'settled'
    FAULTED = 'faulted'


class Reason(enum.Enum):
    """Why the controller does not move, or `NONE`; the words of the state topic."""

    NONE = 'none'
    NO_GOAL = 'no_goal'
    NO_CAMERA = 'no_camera'
    CAMERA_MISMATCH = 'camera_mismatch'
    NO_LISTENER = 'no_listener'
    SECOND_PUBLISHER = 'second_publisher'
    FEATURES_SILENT = 'features_silent'
    IMAGE_SILENT = 'image_silent'
    FEATURES_STALE = 'features_stale'
    STAMP_FUTURE = 'stamp_future'
    STAMP_BACKWARD = 'stamp_backward'
    STAMP_ZERO = 'stamp_zero'
    TOO_FEW_POINTS = 'too_few_points'
    ILL_CONDITIONED = 'ill_conditioned'
    NOT_FINITE = 'not_finite'
    DIVERGING = 'diverging'
    STALLED = 'stalled'
    LEAVING_VIEW = 'leaving_view'
    TRAVEL_LIMIT = 'travel_limit'
    HEARTBEAT_LOST = 'heartbeat_lost'
    HALTED = 'halted'
    OVERRUN = 'overrun'
    CLOCK_JUMP = 'clock_jump'
    EXCEPTION = 'exception'


def _frozen(array: npt.ArrayLike, shape: tuple[int, ...], name: str,
            dtype: type = np.float64) -> npt.NDArray[typing.Any]:
    """Return a read-only copy of `array` as `dtype`; -1 in `shape` takes any length."""
    copy: npt.NDArray[typing.Any] = np.array(array, dtype=dtype)
    fits = copy.ndim == len(shape) and all(
        want in (-1, got) for want, got in zip(shape, copy.shape, strict=True))
    if not fits:
        raise ValueError(f'{name}: expected shape {shape}, got {copy.shape}')
    copy.setflags(write=False)
    return copy


@dataclass(frozen=True, eq=False)
class View:
    """Points of the goal view as one image shows them; no points means "alive, nothing seen".

    Attributes
    ----------
    stamp : int, ns, when the image was taken
    frame_id : str, optical frame of the camera
    points_xy, goal_xy : (N, 2), normalised (undistorted) image coordinates now and in the goal
    depths, goal_depths : (N,), m along the optical axis, NaN where unknown
    weights : (N,), trust in each point, 0..1
    ids : (N,), uint32, the point's number in the goal
    """

    stamp: Stamp
    frame_id: str
    points_xy: Floats
    goal_xy: Floats
    depths: Floats
    goal_depths: Floats
    weights: Floats
    ids: npt.NDArray[np.uint32]

    def __post_init__(self) -> None:
        count = len(self.points_xy)
        for name, shape in (('points_xy', (count, 2)), ('goal_xy', (count, 2)),
                            ('depths', (count,)), ('goal_depths', (count,)),
                            ('weights', (count,))):
            object.__setattr__(self, name, _frozen(getattr(self, name), shape, name))
        object.__setattr__(self, 'ids', _frozen(self.ids, (count,), 'ids', np.uint32))

    def __len__(self) -> int:
        return len(self.ids)

    @classmethod
    def empty(cls, stamp: Stamp, frame_id: str) -> View:
        """Return the view that says "alive, nothing seen"."""
        return cls(stamp, frame_id, np.empty((0, 2)), np.empty((0, 2)), np.empty(0), np.empty(0),
                   np.empty(0), np.empty(0, np.uint32))


@dataclass(frozen=True, eq=False)
class Twist:
    """A velocity of the camera: `vector` is (6,), linear m/s then angular rad/s, in `frame_id`."""

    vector: Floats
    frame_id: str

    def __post_init__(self) -> None:
        object.__setattr__(self, 'vector', _frozen(self.vector, (6,), 'vector'))

    @classmethod
    def zero(cls, frame_id: str) -> Twist:
        """Return exact rest."""
        return cls(np.zeros(6), frame_id)


@dataclass(frozen=True, eq=False)
class Command:
    """One decision of the controller.

    Attributes
    ----------
    twist : Twist, already through the gate
    state, reason : State, Reason
    detail : str, the reason in words: value, limit, remedy; empty when there is none
    decided : int, ns
    view_stamp : int or None, ns, stamp of the view it rests on
    figures : mapping of name to float: error_px, condition, latency_ms, points, ratio, ...
    """

    twist: Twist
    state: State
    reason: Reason
    detail: str
    decided: Stamp
    view_stamp: Stamp | None
    figures: typing.Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Answer:
    """What a request (engage, teach, reset) came to: `ok`, and the sentence that says why."""

    ok: bool
    text: str


@dataclass(frozen=True)
class Calibration:
    """The content of sensor_msgs/CameraInfo, as plain numbers (REP 104).

    Attributes
    ----------
    frame_id : str, optical frame
    width, height : int, px, of the full-resolution image that was calibrated
    model : str, `plumb_bob`, `rational_polynomial` or `equidistant`
    d : distortion coefficients in the order of the model
    k, r : row-major 3x3; `k[0] == 0` means uncalibrated
    p : row-major 3x4
    binning : (x, y), 0 means 1
    roi : (x_offset, y_offset, width, height) in unbinned pixels, all zero means everything
    """

    frame_id: str
    width: int
    height: int
    model: str
    d: tuple[float, ...]
    k: tuple[float, ...]
    r: tuple[float, ...] = (1., 0., 0., 0., 1., 0., 0., 0., 1.)
    p: tuple[float, ...] = ()
    binning: tuple[int, int] = (0, 0)
    roi: tuple[int, int, int, int] = (0, 0, 0, 0)


@dataclass(frozen=True, eq=False)
class Image:
    """Pixels as they came: `array` is (height, width) or (height, width, channels), not copied.

    `encoding` is a name of sensor_msgs/image_encodings, `stamp` ns, `frame_id` an optical frame.
    """

    array: npt.NDArray[typing.Any]
    encoding: str
    stamp: Stamp
    frame_id: str
