# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The simulator: applied twists move a camera before a scene; it exposes pictures and views."""

from __future__ import annotations

import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.simulation import render
from servo_nodes.simulation.plant import Plant
from servo_nodes.simulation.scene import HOME_DISTANCE, scene_from_settings
from servo_nodes.simulation.settings import SimulatorSettings
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Calibration, Floats, Stamp, Twist, View

__all__ = ['Picture', 'Simulator', 'SimulatorSettings']


@dataclass(frozen=True, eq=False)
class Picture:
    """One exposure.

    Attributes
    ----------
    image : (height, width) or (height, width, 3), uint8 or uint16, as `encoding` says
    depth : (height, width), float32, m along the optical axis, NaN where nothing is measured
    calibration : Calibration, the believed one
    pose : (4, 4), T_WC, the true pose of the camera in the frame of the target
    stamp : int, ns
    encoding : str, a name of sensor_msgs/image_encodings
    """

    image: Pixels
    depth: npt.NDArray[np.float32]
    calibration: Calibration
    pose: Floats
    stamp: Stamp
    encoding: str


class Simulator:
    """A camera in a robot's hand before a scene.

    Parameters
    ----------
    settings : SimulatorSettings
    rng : numpy.random.Generator
        Noise, holes, drops; the plate's looks come from `scene.seed` instead.
    photograph : array, uint8, BGR or grey, for `scene.kind` = photograph
    """

    def __init__(self, settings: SimulatorSettings, rng: np.random.Generator,
                 photograph: Pixels | None = None) -> None:
        self._rng = rng
        self._photograph = photograph
        self._adopt(settings)
        self._plant = Plant(settings.plant, self.start, 0)

    @property
    def settings(self) -> SimulatorSettings:
        """Return the settings in force."""
        return self._settings

    @property
    def now(self) -> Stamp:
        """Return the simulated time, ns."""
        return self._plant.now

    @property
    def home(self) -> Floats:
        """Return T_WC (4, 4) of home: 0.42 m in front of the plate, looking straight at it."""
        return motion.pose_from_parts(np.eye(3), (0.0, 0.0, -HOME_DISTANCE))

    @property
    def start(self) -> Floats:
        """Return T_WC (4, 4) of the start."""
        start = self._settings.start
        return typing.cast(Floats, self.home @ motion.pose_from_parts(
            motion.rotation_from_vector(start.rotation), start.translation))

    @property
    def calibration(self) -> Calibration:
        """Return the believed calibration, which the camera publishes."""
        return _calibration_from_camera(self.believed)

    @property
    def pose(self) -> Floats:
        """Return T_WC (4, 4), the true pose of the camera now."""
        return self._plant.pose()

    def restart(self, settings: SimulatorSettings | None = None) -> None:
        """Put the camera back to the start, at rest, at the same time; maybe with new settings."""
        if settings is not None:
            self._adopt(settings)
        self._plant = Plant(self._settings.plant, self.start, self.now)

    def apply(self, twist: Twist | npt.ArrayLike, stamp: Stamp) -> None:
        """Hand the arm a twist (6,) in the camera's frame that reaches it at `stamp`, ns.

        Raises
        ------
        ValueError
            For anything but six finite numbers.
        """
        vector = np.asarray(twist.vector if isinstance(twist, Twist) else twist, dtype=np.float64)
        if vector.shape != (6,) or not np.isfinite(vector).all():
            raise ValueError(f'twist: expected 6 finite numbers, got {vector!r}')
        self._plant.apply(vector, stamp)

    def advance_to(self, t: Stamp) -> None:
        """Move on to `t`, ns.

        Raises
        ------
        ValueError
            When `t` has passed.
        """
        if t < self.now:
            raise ValueError(f'time: expected at least {self.now} ns, got {t} ns')
        self._plant.advance_to(t)

    def expose(self) -> Picture:
        """Take a picture now."""
        camera, pose = self.camera, self.pose
        encoding = self._settings.camera.encoding
        face = self._scene.faces[0]
        T_CF = motion.inverse(pose) @ face.T_SF
        image = render.sampled(face, T_CF, camera, grey=encoding.startswith('mono'))
        noise = self._rng.normal(0, self._settings.camera.noise, image.shape)
        image = cv2.add(image, np.round(noise).astype(np.int16), dtype=cv2.CV_8U)
        with np.errstate(divide='ignore'):
            depth = (1 / render.inverse_depths(T_CF, camera)).astype(np.float32)
        depth[~(depth > 0)] = np.nan
        return Picture(image, depth, self.calibration, pose, self.now, encoding)

    def view(self, goal_pose: npt.ArrayLike | None = None) -> View:
        """Return the landmarks as an ideal tracker would, with the goal seen from `goal_pose`.

        `goal_pose` is T_WC (4, 4), home by default. Landmarks that lie outside either image are
        left out.
        """
        here, z, seen = self._landmarks_from(self.pose)
        there, z_goal, seen_there = self._landmarks_from(
            self.home if goal_pose is None else np.asarray(goal_pose, dtype=np.float64))
        ids = np.flatnonzero(seen & seen_there)
        return View(self.now, self.camera.frame_id, here[ids], there[ids], z[ids], z_goal[ids],
                    np.ones(len(ids)), ids.astype(np.uint32))

    def _landmarks_from(self, pose: Floats) -> tuple[Floats, Floats, npt.NDArray[np.bool_]]:
        T_CW = motion.inverse(pose)
        points = self._scene.landmarks @ T_CW[:3, :3].T + T_CW[:3, 3]
        pixels = self.camera.pixels_from_points(points)
        inside = ((pixels >= 0) & (pixels <= np.subtract(self.camera.size, 1))).all(-1)
        xy = self.believed.normalised_from_pixels(pixels)
        return xy, points[:, 2], inside & np.isfinite(xy).all(-1)

    def _adopt(self, settings: SimulatorSettings) -> None:
        self._settings = settings
        self.camera, self.believed = _cameras(settings)
        scene = settings.scene
        self._scene = scene_from_settings(scene.kind, scene.seed, scene.resolution,
                                          self._photograph, scene.width)


def _cameras(settings: SimulatorSettings) -> tuple[Camera, Camera]:
    """Return the true and the believed camera."""
    true, believed = settings.camera, settings.believed
    cx, cy = true.centre or ((true.width - 1) / 2, (true.height - 1) / 2)
    fx, fy = true.focal
    ratio, (right, down) = believed.focal_ratio, believed.centre_shift
    bent = tuple(k * believed.distortion_ratio for k in true.distortion)
    return (Camera(true.width, true.height, fx, fy, cx, cy, true.model, true.distortion,
                   true.frame_id),
            Camera(true.width, true.height, fx * ratio, fy * ratio, cx + right, cy + down,
                   true.model, bent, true.frame_id))


def _calibration_from_camera(camera: Camera) -> Calibration:
    k = tuple(camera.matrix.ravel().tolist())
    fx, _, cx, _, fy, cy = k[:6]
    return Calibration(camera.frame_id, camera.width, camera.height, camera.model,
                       camera.distortion, k,
                       p=(fx, 0., cx, 0., 0., fy, cy, 0., 0., 0., 1., 0.))
