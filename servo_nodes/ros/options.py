# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the shells themselves can be told, beside the settings of their cores."""

from __future__ import annotations

from dataclasses import dataclass

from servo_nodes.settings import Checked, group, setting


@dataclass(frozen=True)
class ShellSettings(Checked):
    """Every node."""

    autostart: bool = setting(
        True, fixed=True, help='configure and activate at the start; false waits for a lifecycle '
        'manager, and nothing happens until it comes')


@dataclass(frozen=True)
class OverlaySettings(Checked):
    """The picture for the people."""

    rate: float = setting(10.0, unit='Hz', low=0.1, high=60.0, fixed=True,
                          help='most overlays drawn per second, and only while somebody watches')


@dataclass(frozen=True)
class TrackerNodeSettings(Checked):
    """The tracker's shell."""

    image_transport: str = setting(
        'raw', choices=('raw', 'compressed'), fixed=True,
        help='raw listens to image, compressed to image/compressed (JPEG or PNG)')
    overlay: OverlaySettings = group(OverlaySettings)
    seed: int = setting(0, low=0, high=2 ** 31 - 1, fixed=True,
                        help='draws the samples of the consensus; the same images, the same views')


@dataclass(frozen=True)
class ImageSettings(Checked):
    """What the images are that the features come from."""

    rectified: bool = setting(False, fixed=True, help='the tracker looks at rectified images: use '
                              'P of camera_info and no lens distortion; as the tracker has it')


@dataclass(frozen=True)
class ControllerNodeSettings(Checked):
    """The controller's shell."""

    image: ImageSettings = group(ImageSettings)
    priority: int = setting(
        10, low=0, high=20, fixed=True,
        help='how far to raise the priority of the process, as negative niceness; where '
        'that is not permitted it stays ordinary, and the log says so')


@dataclass(frozen=True)
class ClockSettings(Checked):
    """Whose time it is."""

    lead: bool = setting(False, fixed=True, help='publish /clock; the other nodes then need '
                         'use_sim_time')
    speed: float = setting(1.0, low=0.05, high=10.0, fixed=True,
                           help='simulated seconds per second, when clock.lead is true')


@dataclass(frozen=True)
class SimulatorNodeSettings(Checked):
    """The simulator's shell."""

    clock: ClockSettings = group(ClockSettings)
    seed: int = setting(1, low=0, high=2 ** 31 - 1, fixed=True,
                        help='draws noise and faults; the same number, the same noise')
    publish_depth: bool = setting(False, help='publish depth images too, while somebody listens')
    target_frame: str = setting('target', fixed=True, help='frame of true_pose')
