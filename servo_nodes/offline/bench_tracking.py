# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Figures of the tracker on drawn plates with exact truth: accuracy, drift, loss and return, cost.

Plates are drawn at random (shades, bolts, strokes, numbers), seen by a pinhole camera of 640x480
px with noise of two grey levels; where each point lies is known by geometry. Times are ratios: the
same images through the tracker, and through the bare OpenCV calls it made for them, turn by turn
in one thread, by that thread's own clock, which stands still while others have the core.
"""

from __future__ import annotations

import time
import typing
from collections.abc import Callable, Sequence

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.settings import settings_from_mapping
from servo_nodes.tracking.tracker import Tracker, TrackerSettings
from servo_nodes.values import Calibration, Floats, Image, View

WIDTH, HEIGHT, FOCAL = 640, 480, 520.0
DISTANCE, PLATE_WIDE, NOISE = 0.42, 0.9, 2.0
PERIOD_NS, POINTS = 16_666_667, 100
DRIFT_IMAGES, REST_IMAGES, WRONG_SCENES, VIEWS = 2000, 60, 200, 200
OCCLUDED_IMAGES, RETURNS, ROUNDS = 60, 10, 15
_RECORDED = ('calcOpticalFlowPyrLK', 'findHomography', 'remap', 'batchDistance',
             'KeyPoint_convert')
_CALIBRATION = Calibration('camera', WIDTH, HEIGHT, 'plumb_bob', (), (
    FOCAL, 0.0, WIDTH / 2 - 0.5, 0.0, FOCAL, HEIGHT / 2 - 0.5, 0.0, 0.0, 1.0))
_K = np.array(_CALIBRATION.k).reshape(3, 3)

Pixels = npt.NDArray[np.uint8]
Call = tuple[Callable[..., typing.Any], tuple[typing.Any, ...], dict[str, typing.Any]]


def measure(seed: int) -> dict[str, float]:
    """Return the figures; `seed` draws the plates, the views and the noise."""
    threads = cv2.getNumThreads()
    cv2.setNumThreads(1)
    try:
        rng = np.random.default_rng(seed)
        plates = [_Plate(rng) for _ in range(4)]
        figures = {**_accuracy(plates, rng), **_recognition(plates, rng)}
        figures['return_images'] = float(max(
            _images_to_return(plates[k % len(plates)], rng) for k in range(RETURNS)))
        return {**figures, **_cost(plates[0], rng)}
    finally:
        cv2.setNumThreads(threads)


class _Plate:
    """A drawn plate in the plane z = 0 of the world, and the tracker that was taught it."""

    def __init__(self, rng: np.random.Generator) -> None:
        self._texture = _drawn(rng)
        high, wide = self._texture.shape
        scale = wide / PLATE_WIDE
        self._from_plane = np.array([[scale, 0, wide / 2], [0, scale, high / 2], [0, 0, 1.0]])
        self.home = _pose_of(np.eye(3), np.array([0.0, 0.0, DISTANCE]))

    def image(self, T_CW: Floats, rng: np.random.Generator, k: int = 0) -> Image:
        """Return what a camera at T_CW sees: sampled twice as finely, averaged, noisy."""
        fine = np.array([[2.0, 0, 0.5], [0, 2.0, 0.5], [0, 0, 1]])
        matrix = fine @ _K @ T_CW[:3, [0, 1, 3]] @ np.linalg.inv(self._from_plane)
        large = cv2.warpPerspective(self._texture, matrix, (2 * WIDTH, 2 * HEIGHT),
                                    flags=cv2.INTER_LINEAR, borderMode=cv2.BORDER_REFLECT_101)
        light = cv2.resize(large, (WIDTH, HEIGHT), interpolation=cv2.INTER_AREA)
        noisy = light + rng.standard_normal(light.shape, np.float32) * np.float32(NOISE)
        pixels = np.clip(np.rint(noisy), 0, 255).astype(np.uint8)
        return Image(pixels, 'mono8', k * PERIOD_NS, 'camera')

    def taught(self, rng: np.random.Generator) -> Tracker:
        """Return a tracker that was shown the plate from home."""
        settings = settings_from_mapping(TrackerSettings, {
            'detector.points': POINTS, 'teach.distance': DISTANCE})
        tracker = Tracker(settings, rng)
        tracker.calibrate(_CALIBRATION)
        lesson = tracker.teach(self.image(self.home, rng), taught='benchmark')
        if lesson.goal is None:
            raise ValueError(f'plate: expected one fit to be taught, got {lesson.answer.text}')
        tracker.aim(lesson.goal)
        return tracker

    def errors_px(self, view: View, T_CW: Floats) -> Floats:
        """Return how far the points of a view lie from the truth, (N,), px."""
        rays = np.concatenate([view.goal_xy, np.ones((len(view), 1))], axis=1)
        T_CG = T_CW @ motion.inverse(self.home)
        there = DISTANCE * rays @ T_CG[:3, :3].T + T_CG[:3, 3]
        difference = there[:, :2] / there[:, 2:] - view.points_xy
        return FOCAL * np.asarray(np.linalg.norm(difference, axis=1), dtype=np.float64)


def _accuracy(plates: Sequence[_Plate], rng: np.random.Generator) -> dict[str, float]:
    """Median error around home, and after a long wandering motion without a single new search."""
    errors: list[float] = []
    for plate in plates:
        tracker = plate.taught(rng)
        for k in range(REST_IMAGES // len(plates)):
            pose = _offset(plate.home, rng.normal(0, 1e-3, 3), rng.normal(0, 3e-3, 3))
            errors.extend(plate.errors_px(tracker.look(plate.image(pose, rng, k)), pose))
    plate, last = plates[0], np.empty(0)
    tracker = plate.taught(rng)
    for k in range(DRIFT_IMAGES):
        pose = _wandering(plate.home, k)
        view = tracker.look(plate.image(pose, rng, k))
        if k >= DRIFT_IMAGES - 20:
            last = np.concatenate([last, plate.errors_px(view, pose)])
    return {'median_error_px': _median(errors), 'drift_error_px': _median(last)}


def _recognition(plates: Sequence[_Plate], rng: np.random.Generator) -> dict[str, float]:
    """How often the goal is found from far off, and how often something else is taken for it."""
    trackers = [plate.taught(rng) for plate in plates]
    wrong, acquired = 0, 0
    for k in range(WRONG_SCENES):
        other = _Plate(rng) if k % 8 == 0 else plates[(k + 1) % len(plates)]
        tracker = trackers[k % len(plates)]
        wrong += len(tracker.look(other.image(_far_off(rng), rng, 2 * k))) > 0
    for k in range(VIEWS):
        plate, tracker = plates[k % len(plates)], trackers[k % len(plates)]
        tracker.look(_covered(2 * k, rng))
        pose = _far_off(rng)
        view = tracker.look(plate.image(pose, rng, 2 * k + 1))
        acquired += len(view) > 0 and _median(plate.errors_px(view, pose)) < 0.5
    return {'false_acquisitions': float(wrong), 'acquired_share': acquired / VIEWS}


def _images_to_return(plate: _Plate, rng: np.random.Generator) -> int:
    """How many images after a second of total occlusion, the camera moving, the goal is back."""
    tracker = plate.taught(rng)
    begin = int(rng.integers(0, 1000))
    for k in range(20):
        tracker.look(plate.image(_wandering(plate.home, begin + k), rng, k))
    for k in range(20, 20 + OCCLUDED_IMAGES):
        tracker.look(_covered(k, rng))
    for images in range(1, 61):
        k = 20 + OCCLUDED_IMAGES + images
        if len(tracker.look(plate.image(_wandering(plate.home, begin + k), rng, k))):
            return images
    return 60


def _cost(plate: _Plate, rng: np.random.Generator) -> dict[str, float]:
    """The tracker's time over that of the OpenCV calls it makes: following, and searching."""
    detectors: list[_Recorded] = []
    create: typing.Any = cv2.ORB_create  # type: ignore[attr-defined]

    def recorded(*args: typing.Any, **named: typing.Any) -> _Recorded:
        detectors.append(_Recorded(create(*args, **named)))
        return detectors[-1]

    setattr(cv2, 'ORB_create', recorded)  # noqa: B010
    try:
        tracker = plate.taught(rng)
    finally:
        setattr(cv2, 'ORB_create', create)  # noqa: B010
    track = [plate.image(_wandering(plate.home, k), rng, k) for k in range(20)]
    views = [image for _ in range(10) for image in (
        _covered(0, rng), plate.image(_far_off(rng), rng))]
    tracker.look(track[0])
    return {'look_over_opencv': _ratio(tracker, track + track[::-1], detectors, ROUNDS),
            'acquire_over_opencv': _ratio(tracker, views, detectors, ROUNDS // 3)}


def _ratio(tracker: Tracker, images: Sequence[Image], detectors: Sequence[_Recorded],
           rounds: int) -> float:
    """Time each image through the tracker, then its calls alone; the quickest of each counts."""
    look, bare = np.empty((rounds, len(images))), np.empty((rounds, len(images)))
    for turn in range(rounds):
        for k, image in enumerate(images):
            start = time.thread_time()
            tracker.look(image)
            look[turn, k] = time.thread_time() - start
        all_calls = [_calls_of(tracker, image, detectors) for image in images]
        for k, calls in enumerate(all_calls):
            start = time.thread_time()
            for function, args, named in calls:
                function(*args, **named)
            bare[turn, k] = time.thread_time() - start
    return float(look.min(0).sum() / bare.min(0).sum())


def _calls_of(tracker: Tracker, image: Image, detectors: Sequence[_Recorded]) -> list[Call]:
    """Return the OpenCV calls the tracker makes for an image, with their arguments."""
    calls: list[Call] = []
    real = {name: getattr(cv2, name) for name in _RECORDED}
    try:
        for name, function in real.items():
            setattr(cv2, name, _noting(function, calls))
        for detector in detectors:
            detector.calls = calls
        tracker.look(image)
    finally:
        for name, function in real.items():
            setattr(cv2, name, function)
        for detector in detectors:
            detector.calls = None
    return calls


def _noting(function: Callable[..., typing.Any], calls: list[Call]) -> Callable[..., typing.Any]:
    def noted(*args: typing.Any, **named: typing.Any) -> typing.Any:
        calls.append((function, args, named))
        return function(*args, **named)
    return noted


class _Recorded:
    """A detector that notes its calls while somebody asks for them."""

    def __init__(self, detector: typing.Any) -> None:
        self._detector = detector
        self.calls: list[Call] | None = None

    def detectAndCompute(self, *args: typing.Any) -> typing.Any:  # OpenCV's name
        """Do as the detector does."""
        if self.calls is not None:
            self.calls.append((self._detector.detectAndCompute, args, {}))
        return self._detector.detectAndCompute(*args)


def _drawn(rng: np.random.Generator) -> Pixels:
    """Draw a plate: shades of several sizes, bolts, strokes and numbers."""
    wide, high = 1800, 1400
    light = np.full((high, wide), float(rng.uniform(90, 150)), np.float32)
    for cells, strength in ((6, 25), (24, 16), (96, 10), (400, 7)):
        coarse = rng.standard_normal((cells * high // wide, cells), np.float32) * strength
        light += cv2.resize(coarse, (wide, high), interpolation=cv2.INTER_CUBIC)
    light = np.clip(light, 5, 250).astype(np.uint8)
    for _ in range(160):
        x, y = (int(rng.integers(0, side)) for side in (wide, high))
        tone, size = float(rng.uniform(20, 235)), int(rng.integers(5, 30))
        kind = rng.integers(0, 3)
        if kind == 0:
            cv2.circle(light, (x, y), size, tone, -1, cv2.LINE_AA)
        elif kind == 1:
            end = (x + int(rng.integers(-120, 120)), y + int(rng.integers(-120, 120)))
            cv2.line(light, (x, y), end, tone, max(2, size // 5), cv2.LINE_AA)
        else:
            cv2.putText(light, str(rng.integers(10, 999)), (x, y), cv2.FONT_HERSHEY_SIMPLEX,
                        size / 12, tone, max(2, size // 8), cv2.LINE_AA)
    return np.asarray(cv2.GaussianBlur(light, (0, 0), 1.0), dtype=np.uint8)


def _wandering(home: Floats, k: int) -> Floats:
    """Return the k-th pose of a smooth motion that comes nowhere twice, at up to 6 cm/s."""
    t = k / 60
    shift = 0.03 * np.array([np.sin(1.3 * t), np.sin(1.7 * t + 1), np.sin(0.9 * t + 2)])
    turn = np.radians([4 * np.sin(0.9 * t), 5 * np.sin(1.1 * t + 1), 15 * np.sin(0.7 * t)])
    return _offset(home, shift, turn)


def _far_off(rng: np.random.Generator) -> Floats:
    """Return a pose within 45 degrees of roll, 30 of tilt, and 0.6 to 1.7 times the size."""
    roll, tilt = np.radians(rng.uniform((-45, -30), (45, 30)))
    way = rng.uniform(0, 2 * np.pi)
    turn = motion.rotation_from_vector([0, 0, roll]) @ motion.rotation_from_vector(
        tilt * np.array([np.cos(way), np.sin(way), 0]))
    return _pose_of(turn, np.array([*rng.uniform(-0.02, 0.02, 2),
                                    DISTANCE / rng.uniform(0.6, 1.7)]))


def _offset(home: Floats, shift: Floats, turn: Floats) -> Floats:
    return np.asarray(motion.inverse(_pose_of(motion.rotation_from_vector(turn), shift)) @ home)


def _pose_of(rotation: Floats, translation: Floats) -> Floats:
    return motion.pose_from_parts(rotation, translation)


def _covered(k: int, rng: np.random.Generator) -> Image:
    """Return the image of a hand before the lens."""
    pixels = 70 + rng.normal(0, 4, (HEIGHT, WIDTH))
    return Image(np.clip(pixels, 0, 255).astype(np.uint8), 'mono8', k * PERIOD_NS, 'camera')


def _median(numbers: npt.ArrayLike) -> float:
    return float(np.median(np.asarray(numbers))) if np.size(numbers) else float('nan')
