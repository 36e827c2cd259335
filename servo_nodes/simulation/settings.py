# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The settings of the simulator: the one definition of names, units, ranges and meaning."""

from __future__ import annotations

from dataclasses import dataclass

from servo_nodes.camera import MODELS
from servo_nodes.settings import Checked, group, setting
from servo_nodes.simulation.faults import FaultSettings

SCENES = ('plate', 'relief', 'markers', 'photograph')
ENCODINGS = ('mono8', 'bgr8', 'rgb8', 'mono16')


@dataclass(frozen=True)
class SceneSettings(Checked):
    """What the camera looks at; the target lies in the plane z = 0 of the world."""

    kind: str = setting('plate', choices=SCENES, fixed=True,
                        help='the tram-depot flap, blocks on it, a marker board, or a photograph')
    seed: int = setting(7, low=0, high=2 ** 31 - 1, fixed=True,
                        help='draws the scratches and the rust; the same number, the same plate')
    resolution: float = setting(0.0004, unit='m', low=0.0001, high=0.01, fixed=True,
                                help='size of one texel of what the package draws')
    width: float = setting(0.4, unit='m', low=0.01, high=100.0, fixed=True,
                           help='width of the photograph or of the marker board')
    dictionary: str = setting('DICT_4X4_50', fixed=True,
                              help="OpenCV's name of the markers' dictionary")
    drift: tuple[float, ...] = setting(
        (0., 0., 0., 0., 0., 0.), unit='m/s, rad/s', lengths=(6,), low=-1.0, high=1.0,
        help='constant twist of the target in the world: linear, then angular')
    vibration: tuple[float, ...] = setting(
        (0., 0., 0.), unit='m', lengths=(3,), low=-0.1, high=0.1,
        help='amplitude of the swinging target along the axes of the world')
    vibration_rate: float = setting(8.0, unit='Hz', low=0.01, high=200.0,
                                    help='how fast the target swings')


@dataclass(frozen=True)
class LightSettings(Checked):
    """How the scene is lit."""

    level: float = setting(1.0, low=0.0, high=4.0, help='brightness; 1 shows the scene as drawn')
    fade: float = setting(0.0, unit='1/s', low=-1.0, high=1.0,
                          help='how much the brightness grows each second')
    flicker: float = setting(0.0, low=0.0, high=1.0, help='amplitude of a flickering lamp')
    flicker_rate: float = setting(7.0, unit='Hz', low=0.01, high=1000.0, help='its frequency')
    slope: float = setting(0.0, low=-1.0, high=1.0,
                           help='how much brighter the right border is than the middle')


@dataclass(frozen=True)
class OccluderSettings(Checked):
    """A sleeve that passes between camera and target, from left to right, again and again."""

    present: bool = setting(False, help='whether it passes at all')
    height: float = setting(0.15, unit='m', low=0.01, high=10.0, help='its height above the plane')
    size: float = setting(0.08, unit='m', low=0.005, high=1.0, help='its width')
    speed: float = setting(0.2, unit='m/s', low=0.001, high=5.0, help='its speed to the right')
    travel: float = setting(1.2, unit='m', low=0.05, high=20.0,
                            help='the way it goes before it starts again on the left')


@dataclass(frozen=True)
class CameraSettings(Checked):
    """The true camera."""

    width: int = setting(640, unit='px', low=16, high=4096, fixed=True, help='columns')
    height: int = setting(480, unit='px', low=16, high=4096, fixed=True, help='rows')
    focal: tuple[float, ...] = setting((600., 600.), unit='px', lengths=(2,), low=1.0, high=1e5,
                                       fixed=True, help='fx, fy')
    centre: tuple[float, ...] = setting((), unit='px', lengths=(0, 2), fixed=True,
                                        help='cx, cy; empty: the middle of the image')
    model: str = setting('plumb_bob', choices=tuple(MODELS), fixed=True, help='lens model')
    distortion: tuple[float, ...] = setting(
        (-0.08, 0.05, 0.0005, -0.0003, 0.0), lengths=(0, 4, 5, 8), fixed=True,
        help="coefficients in CameraInfo's order; empty for none")
    frame_id: str = setting('camera_optical_frame', fixed=True, help='optical frame')
    encoding: str = setting('mono8', choices=ENCODINGS, fixed=True, help='encoding of the images')
    rate: float = setting(30.0, unit='Hz', low=0.1, high=1000.0, help='images per second')
    exposure: float = setting(0.0, unit='s', low=0.0, high=1.0,
                              help='exposure time, blurs what moves; the stamp is its middle')
    readout: float = setting(0.0, unit='s', low=0.0, high=1.0,
                             help='time from the first to the last row of a rolling shutter')
    aperture: float = setting(0.0, unit='m', low=0.0, high=0.1,
                              help='diameter of the lens, which blurs what is out of focus')
    focus: float = setting(0.42, unit='m', low=0.01, high=100.0, help='distance in focus')
    vignetting: float = setting(0.0, low=0.0, high=1.0,
                                help='share of the light that is lost in the corners')
    gain: float = setting(1.0, low=0.01, high=64.0, help='amplification, of noise too')
    noise: float = setting(2.0, unit='grey levels of 255', low=0.0, high=100.0,
                           help='standard deviation of the noise in the dark')
    shot_noise: float = setting(0.0, unit='grey levels of 255', low=0.0, high=100.0,
                                help='standard deviation that light itself adds at full scale')

    def check_together(self) -> None:
        """Refuse coefficients that the lens model does not have."""
        if len(self.distortion) not in MODELS[self.model]:
            lengths = ' or '.join(map(str, MODELS[self.model]))
            raise ValueError(f'distortion: expected {lengths} numbers for {self.model}, '
                             f'got {len(self.distortion)}')


@dataclass(frozen=True)
class BelievedSettings(Checked):
    """How far the published calibration is from the true camera."""

    focal_ratio: float = setting(1.0, low=0.1, high=10.0, help='believed over true focal length')
    centre_shift: tuple[float, ...] = setting((0., 0.), unit='px', lengths=(2,),
                                              help='believed minus true principal point')
    distortion_ratio: float = setting(1.0, low=-10.0, high=10.0,
                                      help='believed over true distortion coefficients')


@dataclass(frozen=True)
class DepthSettings(Checked):
    """The depth image."""

    nearest: float = setting(0.1, unit='m', low=0.0, high=100.0, help='nothing nearer is measured')
    farthest: float = setting(4.0, unit='m', low=0.01, high=1000.0, help='nor anything farther')
    noise: float = setting(0.0, unit='m at 1 m', low=0.0, high=1.0,
                           help='standard deviation; it grows with the square of the depth')
    holes: float = setting(0.0, low=0.0, high=1.0, help='share of the image without depth')
    scale: float = setting(1.0, low=0.01, high=100.0, help='measured over true depth')


@dataclass(frozen=True)
class PlantSettings(Checked):
    """The arm: what becomes of a command."""

    delay: float = setting(0.0, unit='s', low=0.0, high=10.0,
                           help='from the arrival of a command to its effect')
    lag: float = setting(0.0, unit='s', low=0.0, high=10.0,
                         help='time constant of the first-order lag')
    limited: bool = setting(False, help='whether the accelerations below bound the arm')
    linear_acceleration: float = setting(1.0, unit='m/s^2', low=0.001, high=1000.0,
                                         help='largest change of the linear velocity')
    angular_acceleration: float = setting(4.0, unit='rad/s^2', low=0.001, high=1000.0,
                                          help='largest change of the angular velocity')
    linear_step: float = setting(0.0, unit='m/s', low=0.0, high=1.0,
                                 help='commands are rounded to multiples of this')
    angular_step: float = setting(0.0, unit='rad/s', low=0.0, high=1.0,
                                  help='commands are rounded to multiples of this')
    silence: str = setting('stop', choices=('stop', 'hold'),
                           help='without commands the arm stops, or holds the last one for ever')
    timeout: float = setting(0.5, unit='s', low=0.001, high=60.0,
                             help='how long a command lasts where silence stops the arm')
    hand_eye_translation: tuple[float, ...] = setting(
        (0., 0., 0.), unit='m', lengths=(3,), low=-1.0, high=1.0,
        help='where the true camera sits in the frame the arm believes to be the camera')
    hand_eye_rotation: tuple[float, ...] = setting(
        (0., 0., 0.), unit='rad', lengths=(3,), low=-3.2, high=3.2,
        help='how the true camera is turned there, as a rotation vector')


@dataclass(frozen=True)
class StartSettings(Checked):
    """Where the camera starts, relative to home, in the optical frame it has at home."""

    translation: tuple[float, ...] = setting((0., 0., 0.), unit='m', lengths=(3,),
                                             low=-10.0, high=10.0, help='right, down, forward')
    rotation: tuple[float, ...] = setting((0., 0., 0.), unit='rad', lengths=(3,),
                                          low=-3.2, high=3.2, help='rotation vector')


@dataclass(frozen=True)
class ViewSettings(Checked):
    """The points of `Simulator.view`, which need no image."""

    noise_px: float = setting(0.0, unit='px', low=0.0, high=100.0,
                              help='standard deviation of the points')
    missing: float = setting(0.0, low=0.0, high=1.0, help='share of the points that are not seen')


@dataclass(frozen=True)
class SimulatorSettings(Checked):
    """All of the simulator."""

    scene: SceneSettings = group(SceneSettings)
    light: LightSettings = group(LightSettings)
    occluder: OccluderSettings = group(OccluderSettings)
    camera: CameraSettings = group(CameraSettings)
    believed: BelievedSettings = group(BelievedSettings)
    depth: DepthSettings = group(DepthSettings)
    plant: PlantSettings = group(PlantSettings)
    start: StartSettings = group(StartSettings)
    view: ViewSettings = group(ViewSettings)
    faults: FaultSettings = group(FaultSettings)
