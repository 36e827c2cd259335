# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The simulator: applied twists move a camera before a scene; it exposes pictures and views.

World W, target T (they coincide while the target is at rest), camera C. Home is 0.42 m in front
of the plate, looking straight at it. The same settings, seed, commands and times give the same
pictures, byte for byte.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.simulation import render, sensor, surroundings
from servo_nodes.simulation.faults import Channel, damaged_image
from servo_nodes.simulation.plant import Plant
from servo_nodes.simulation.scene import HOME_DISTANCE, Scene, scene_from_settings
from servo_nodes.simulation.settings import SimulatorSettings
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import SECOND_NS, Calibration, Floats, Stamp, Twist, View

__all__ = ['Picture', 'Simulator', 'SimulatorSettings']


@dataclass(frozen=True, eq=False)
class Picture:
    """One exposure.

    Attributes
    ----------
    image : (height, width) or (height, width, 3), uint8 or uint16, as `encoding` says
    calibration : Calibration, the believed one
    pose : (4, 4), T_WC, the true pose of the camera in the world
    stamp : int, ns, middle of the exposure of the middle row
    encoding : str, a name of sensor_msgs/image_encodings
    measure : makes the depth image
    """

    image: Pixels
    calibration: Calibration
    pose: Floats
    stamp: Stamp
    encoding: str
    measure: Callable[[], sensor.Field] = field(repr=False)

    @functools.cached_property
    def depth(self) -> sensor.Field:
        """Return (height, width), float32, m along the optical axis, NaN where unknown.

        It is rendered when first asked for, and is the same whenever that is.
        """
        return self.measure()


class Simulator:
    """A camera in a robot's hand before a scene.

    Parameters
    ----------
    settings : SimulatorSettings
    rng : numpy.random.Generator
        Noise, holes, faults; the looks of the scene come from `scene.seed` instead.
    photograph : array, uint8, BGR or grey, for `scene.kind` = photograph
    """

    def __init__(self, settings: SimulatorSettings, rng: np.random.Generator,
                 photograph: Pixels | None = None) -> None:
        self._photograph = photograph
        sight, self._holes, self._points, link = rng.spawn(4)
        self._noise = sensor.Noise(sight)
        self._line: Channel[Picture] = Channel(settings.faults, link)
        self._adopt(settings)
        self._epoch: Stamp = 0
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
    def period(self) -> Stamp:
        """Return the time from one image to the next, ns."""
        return round(SECOND_NS / self._settings.camera.rate)

    @property
    def home(self) -> Floats:
        """Return T_WC (4, 4) of home."""
        return motion.pose_from_parts(np.eye(3), (0.0, 0.0, -HOME_DISTANCE))

    @property
    def start(self) -> Floats:
        """Return T_WC (4, 4) of the start."""
        start = self._settings.start
        pose: Floats = self.home @ motion.pose_from_parts(
            motion.rotation_from_vector(start.rotation), start.translation)
        return pose

    @property
    def scene(self) -> Scene:
        """Return what there is to see."""
        return self._scene

    @property
    def camera(self) -> Camera:
        """Return the true camera."""
        return self._true

    @property
    def calibration(self) -> Calibration:
        """Return the believed calibration, which the camera publishes."""
        return _calibration_from_camera(self._believed)

    @property
    def pose(self) -> Floats:
        """Return T_WC (4, 4), the true pose of the camera now."""
        return self._plant.state()[0]

    @property
    def velocity(self) -> Floats:
        """Return the true twist (6,) of the camera now, in its own frame."""
        return self._plant.state()[1]

    @property
    def target(self) -> Floats:
        """Return T_WT (4, 4), the pose of the target now."""
        return surroundings.target_pose(self._settings.scene, self._elapsed)

    @property
    def next_arrival(self) -> Stamp | None:
        """Return when the next transmitted picture arrives, ns; None when none is on its way."""
        return self._line.next_due

    def restart(self, settings: SimulatorSettings | None = None, *,
                now: Stamp | None = None) -> None:
        """Put the camera back to the start, at rest, maybe with new settings.

        The time goes on, or is set to `now`, ns. Pictures on their way are forgotten.
        """
        if settings is not None:
            self._adopt(settings)
        self._epoch = self.now if now is None else now
        self._line.clear()
        self._plant = Plant(self._settings.plant, self.start, self._epoch)

    def adopt(self, settings: SimulatorSettings) -> None:
        """Let new settings apply from now on; the camera stays where it is."""
        self._adopt(settings)
        self._plant.adopt(settings.plant)

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
        settings, camera = self._settings, self._true
        pose, velocity = self._plant.state()
        placed = self._placed(pose, velocity)
        shutter = render.Shutter(settings.camera.exposure, settings.camera.readout)
        light = render.picture(placed, camera, shutter,
                               grey=settings.camera.encoding.startswith('mono'))
        image = sensor.exposed(
            light, camera, settings.camera, self._noise, slope=settings.light.slope,
            brightness=surroundings.brightness(settings.light, self._elapsed),
            depth=render.middle_depth(placed[0]))
        seed = int(self._holes.integers(2 ** 62))

        def measure() -> sensor.Field:
            return sensor.measured_depth(render.inverse_depths(placed, camera), settings.depth,
                                         np.random.default_rng(seed))

        return Picture(image, self.calibration, pose, self.now, settings.camera.encoding, measure)

    def transmit(self, picture: Picture) -> None:
        """Send a picture down the line, where `faults` befall it."""
        self._line.put(picture, picture.stamp, self.now)

    def arrivals(self) -> list[Picture]:
        """Return the transmitted pictures that have arrived by now, as the line left them."""
        faults = self._settings.faults
        return [replace(picture, stamp=outcome.stamp,
                        image=damaged_image(picture.image, outcome, faults))
                for outcome, picture in self._line.take(self.now)]

    def view(self, goal_pose: npt.ArrayLike | None = None) -> View:
        """Return the landmarks as an ideal tracker would, with the goal seen from `goal_pose`.

        Parameters
        ----------
        goal_pose : (4, 4), T_WC with the target at rest; home by default

        Notes
        -----
        Landmarks outside either image, or hidden in one, are left out. Pixels come from the true
        camera and become rays by the believed one, in both images; depths are true.
        """
        goal = self.home if goal_pose is None else np.asarray(goal_pose, dtype=np.float64)
        here, z, seen = self._landmarks_from(self._placed(self.pose, np.zeros(6)))
        there, z_goal, seen_there = self._landmarks_from(
            self._placed(goal, np.zeros(6), at_rest=True))
        noisy = here + self._points.normal(0, 1, here.shape) * self._settings.view.noise_px
        kept = self._points.random(len(here)) >= self._settings.view.missing
        xy, goal_xy = (self._believed.normalised_from_pixels(uv) for uv in (noisy, there))
        ids = np.flatnonzero(seen & seen_there & kept & np.isfinite(xy + goal_xy).all(axis=-1))
        return View(self.now, self._true.frame_id, xy[ids], goal_xy[ids], z[ids], z_goal[ids],
                    np.ones(len(ids)), ids.astype(np.uint32))

    @property
    def _elapsed(self) -> float:
        return (self.now - self._epoch) / SECOND_NS

    def _placed(self, pose: Floats, velocity: Floats, *, at_rest: bool = False
                ) -> list[render.Placed]:
        """Return the faces before a camera at `pose`; `at_rest`: the undisturbed scene."""
        settings, t = self._settings, self._elapsed
        T_CT, twist = motion.inverse(pose), velocity
        if not at_rest:
            T_CT = T_CT @ self.target
            twist = velocity - motion.transport(T_CT, surroundings.target_twist(settings.scene, t))
        placed = [render.Placed(face, T_CT @ face.T_SF, twist) for face in self._scene.faces]
        if settings.occluder.present and not at_rest:
            T_CO = motion.inverse(pose) @ surroundings.occluder_pose(settings.occluder, t)
            passing = motion.transport(T_CO, (settings.occluder.speed, 0, 0, 0, 0, 0))
            face = surroundings.sleeve(settings.occluder.size, settings.scene.seed)
            placed.append(render.Placed(face, T_CO, velocity - passing))
        return placed

    def _landmarks_from(self, placed: list[render.Placed]
                        ) -> tuple[Floats, Floats, npt.NDArray[np.bool_]]:
        """Return pixels (N, 2), depths (N,), and which are seen."""
        T_CT = placed[0].T_CF
        points = self._scene.landmarks @ T_CT[:3, :3].T + T_CT[:3, 3]
        pixels = self._true.pixels_from_points(points)
        limit = np.subtract(self._true.size, 1)
        outside = np.isnan(pixels) | (pixels < 0) | (pixels > limit)
        seen = ~(outside[:, 0] | outside[:, 1] | render.is_hidden(points, placed))
        return pixels, points[:, 2], seen

    def _adopt(self, settings: SimulatorSettings) -> None:
        self._scene = scene_from_settings(settings.scene, self._photograph)
        self._true, self._believed = _cameras(settings)
        self._settings = settings
        self._line.adopt(settings.faults)


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
    k: tuple[float, ...] = tuple(camera.matrix.ravel().tolist())
    fx, _, cx, _, fy, cy = k[:6]
    return Calibration(camera.frame_id, camera.width, camera.height, camera.model,
                       camera.distortion, k,
                       p=(fx, 0., cx, 0., 0., fy, cy, 0., 0., 0., 1., 0.))
