# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller's settings: the only definition of their names, units, ranges and defaults."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from servo_nodes import motion
from servo_nodes.control.law import LawSettings
from servo_nodes.settings import (
    Checked,
    definitions,
    group,
    mapping_from_settings,
    setting,
)

LINEAR_HARD_CAP = 0.25
ANGULAR_HARD_CAP = 1.5


@dataclass(frozen=True)
class CapsSettings(Checked):
    """How fast, how suddenly and along which axes the camera may move."""

    linear: float = setting(
        0.10, unit='m/s', low=0.001, high=LINEAR_HARD_CAP,
        help='largest speed of the camera and of the tool; too high frightens, too low crawls')
    angular: float = setting(
        0.5, unit='rad/s', low=0.001, high=ANGULAR_HARD_CAP,
        help='largest turn rate; with a long lever arm the linear cap at the tool bites first')
    linear_acceleration: float = setting(
        0.5, unit='m/s^2', low=0.01, high=5.0,
        help='largest change of linear velocity; too low makes the loop overshoot')
    angular_acceleration: float = setting(
        2.5, unit='rad/s^2', low=0.05, high=25.0,
        help='largest change of turn rate; too low makes the loop overshoot')
    stop_deceleration: float = setting(
        1.0, unit='m/s^2', low=0.1, high=10.0,
        help='how a hold brakes; the ramp lasts caps.linear / caps.stop_deceleration at most')
    stop_angular_deceleration: float = setting(
        5.0, unit='rad/s^2', low=0.5, high=50.0,
        help='how a hold brakes a turn; the ramp lasts caps.angular divided by this at most')
    hard_linear: float = setting(
        LINEAR_HARD_CAP, unit='m/s', low=0.001, high=LINEAR_HARD_CAP, fixed=True,
        help='bounds what caps.linear can ask for at run time; the reduced speed of ISO 10218-1')
    hard_angular: float = setting(
        ANGULAR_HARD_CAP, unit='rad/s', low=0.001, high=ANGULAR_HARD_CAP, fixed=True,
        help='bounds what caps.angular can ask for at run time')
    axes: tuple[float, ...] = setting(
        (1.0,) * 6, low=0.0, high=1.0, lengths=(6,),
        help='1 lets the camera move along (x y z) or about (x y z) an axis of its optical frame, '
             '0 forbids it; with an axis forbidden some errors cannot be removed')

    def check_together(self) -> None:
        """Refuse caps beyond the hard caps and masks that are not 0 or 1, or forbid everything."""
        for name in ('linear', 'angular'):
            cap, hard = getattr(self, name), getattr(self, 'hard_' + name)
            if not cap <= hard:
                raise ValueError(f'caps.{name}: expected at most caps.hard_{name} = {hard:g}, '
                                 f'got {cap:g}')
        if not set(self.axes) <= {0.0, 1.0} or not any(self.axes):
            raise ValueError(f'caps.axes: expected zeros and at least one 1, got {self.axes}')


@dataclass(frozen=True)
class WatchdogSettings(Checked):
    """What the gate expects of views, of their age and of the loop's progress."""

    timeout: float = setting(
        0.12, unit='s', low=0.05, high=1.0,
        help='longest silence of good features before the loop holds; below three periods of the '
             'camera it holds all the time')
    staleness: float = setting(
        0.25, unit='s', low=0.02, high=1.0,
        help='oldest image that may still move the camera; too low holds on a slow tracker')
    future_tolerance: float = setting(
        0.05, unit='s', low=0.001, high=0.2,
        help='how far ahead of the clock a stamp may be before its view is dropped')
    zero_stamp: str = setting(
        'receive', choices=('receive', 'reject'),
        help='what to do with a view that nobody stamped: take the time of receipt, or drop it')
    least_points: int = setting(
        4, low=4, high=10000,
        help='fewest points that may move the camera; fewer than four leave several poses open')
    condition: float = setting(
        1000.0, low=10.0, high=1e6,
        help='largest condition number of the law; beyond it noise moves the camera')
    smallest: float = setting(
        1e-3, low=1e-9, high=1.0,
        help='least singular value of the law; below it a direction of motion cannot be seen')
    frozen: float = setting(
        0.25, unit='s', low=0.1, high=10.0,
        help='how long the points may stay exactly the same while the camera is moved')
    border: float = setting(
        0.04, low=0.0, high=0.3,
        help='width of the band along the image border, as a share of the smaller side')
    crowd_slow: float = setting(
        0.4, low=0.05, high=1.0,
        help='share of points inside the border band from which the camera slows down')
    crowd_hold: float = setting(
        0.7, low=0.05, high=1.0,
        help='share of points inside the border band from which the camera holds')
    diverging_window: float = setting(
        1.6, unit='s', low=0.4, high=60.0,
        help='an error that grows all through this window is a fault')
    diverging_growth: float = setting(
        1.5, low=1.05, high=100.0,
        help='how many times larger the error must have become in that window')
    stalled_window: float = setting(
        5.0, unit='s', low=0.5, high=600.0,
        help='an error above tolerance that makes no progress for so long is a fault')
    stalled_progress: float = setting(
        0.05, low=0.001, high=0.9,
        help='share of the error that must vanish in that window')
    travel: float = setting(
        1.0, unit='m', low=0.01, high=100.0,
        help='leash: how far from where it was engaged the camera may be moved')
    turn: float = setting(
        3.5, unit='rad', low=0.05, high=100.0,
        help='leash: how far since it was engaged the camera may be turned; no angle, it goes on '
             'after half a turn')

    def check_together(self) -> None:
        """Refuse a hold that comes before its slowing down."""
        if not self.crowd_slow <= self.crowd_hold:
            raise ValueError('watchdog.crowd_slow: expected at most watchdog.crowd_hold = '
                             f'{self.crowd_hold:g}, got {self.crowd_slow:g}')


@dataclass(frozen=True)
class HeartbeatSettings(Checked):
    """Whether an operator's side must keep saying that it is there."""

    required: bool = setting(False, help='hold unless messages arrive on ~/heartbeat')
    timeout: float = setting(0.5, unit='s', low=0.05, high=5.0,
                             help='longest silence of the heartbeat before the loop holds')


@dataclass(frozen=True)
class SettleSettings(Checked):
    """When the camera counts as home; the loop keeps regulating there."""

    error_px: float = setting(
        1.0, unit='px', low=0.05, high=50.0,
        help='largest error of the points; below the noise of the tracker it never settles')
    linear: float = setting(
        0.2e-3, unit='m', low=1e-6, high=0.1,
        help='largest way that the law still asks for (its velocity divided by its gain)')
    angular: float = setting(
        0.5e-3, unit='rad', low=1e-6, high=0.5,
        help='largest turn that the law still asks for')
    noise_px: float = setting(
        0.1, unit='px', low=0.0, high=10.0,
        help='noise of the tracked points; where they tell the pose less surely than '
             'settle.linear and settle.angular ask, what they do tell is enough')
    duration: float = setting(
        0.5, unit='s', low=0.02, high=30.0,
        help='how long all of this must hold before the state turns to settled')
    smoothing: float = setting(
        0.2, unit='s', low=0.0, high=5.0,
        help='time constant of the average that is judged, so that noise is not taken for motion')
    hysteresis: float = setting(
        3.0, low=1.0, high=20.0,
        help='how many times the tolerances the loop may leave before it counts as away again')


@dataclass(frozen=True)
class OutputSettings(Checked):
    """Where the twist goes and who may be there."""

    frame: str = setting('', fixed=True,
                         help='frame in which the twist is sent; empty: the optical frame')
    from_camera: tuple[float, ...] = setting(
        (), lengths=(0, 7), fixed=True,
        help='pose x y z qx qy qz qw of the camera in output.frame; empty: no transport')
    listener_required: bool = setting(
        True, help='refuse to engage, and stop, when nobody listens to the command')
    sole_publisher: bool = setting(
        True, help='refuse to engage, and stop, when somebody else publishes the command')

    def check_together(self) -> None:
        """Refuse a frame without a pose, a pose without a frame, and a pose that is none."""
        if bool(self.frame) != bool(self.from_camera):
            raise ValueError('output.frame: expected together with output.from_camera, got '
                             f'frame {self.frame!r} and from_camera {self.from_camera}')
        if self.from_camera:
            try:
                motion.pose_from_numbers(np.array(self.from_camera))
            except ValueError as error:
                raise ValueError(f'output.from_camera: {error}') from error


@dataclass(frozen=True)
class ControllerSettings(Checked):
    """Everything the controller can be told."""

    law: LawSettings = group(LawSettings)
    caps: CapsSettings = group(CapsSettings)
    watchdog: WatchdogSettings = group(WatchdogSettings)
    heartbeat: HeartbeatSettings = group(HeartbeatSettings)
    settle: SettleSettings = group(SettleSettings)
    output: OutputSettings = group(OutputSettings)
    rate: float = setting(100.0, unit='Hz', low=10.0, high=1000.0, fixed=True,
                          help='how often the controller decides')


def fixed_change(old: ControllerSettings, new: ControllerSettings) -> str:
    """Return the sentence about a setting that must not change while running; empty without."""
    before, after = mapping_from_settings(old), mapping_from_settings(new)
    for name, definition in definitions(ControllerSettings).items():
        if definition.fixed and before[name] != after[name]:
            return (f'{name}: expected {before[name]!r} to stay while running, got '
                    f'{after[name]!r}; set it at the start')
    return ''
