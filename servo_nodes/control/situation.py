# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Everything the gate judges, gathered at one moment."""

from __future__ import annotations

import typing

from servo_nodes.control.settings import HeartbeatSettings, OutputSettings, WatchdogSettings
from servo_nodes.values import Reason


class Situation(typing.NamedTuple):
    """One moment of the loop; the defaults are those of a loop at its best.

    Attributes
    ----------
    watchdog, heartbeat, output : the limits in force
    exception : str, type and message of an error of ours; empty when there was none
    halted : bool, the halt input was true since the last reset
    jumped : bool, the clock was set under us since the last request to engage
    calibrated : bool, there is a camera and nothing is wrong with it
    camera_fault : str, what is wrong with camera_info; empty when nothing is
    camera_changed : str, how the camera changed while engaged; empty when it did not
    publishers, listeners : int, of the command, our own publisher included
    travelled, turned : float, m and rad, since the loop was engaged
    grown : float, how many times the error grew all through the window of `diverging`
    stalled : float, s without progress
    heartbeat_age : float, s, since the operator's side was heard; inf when never
    bad : Reason, why the newest message was dropped; NONE when it was good
    bad_text : str, the same as *expected ..., got ...*
    bad_in_a_row : int, messages dropped since the last good one
    heard_age, good_age, image_age : float, s, since any message, since a good one, since the image
        of the newest good one was taken; inf when never
    law_is_finite : bool, the law's twist is six finite numbers
    condition, smallest : float, of the law's linear system
    refusal : str, why the law must not run from here; empty when it may
    error_px : float, of the points
    crowded : float, share of the points along the image border or beyond
    late_in_a_row : int, ticks
    late : float, s, of the last late tick
    slept : float, s, between this tick and the one before
    """

    watchdog: WatchdogSettings
    heartbeat: HeartbeatSettings
    output: OutputSettings
    exception: str = ''
    halted: bool = False
    jumped: bool = False
    calibrated: bool = True
    camera_fault: str = ''
    camera_changed: str = ''
    publishers: int = 1
    listeners: int = 1
    travelled: float = 0.0
    turned: float = 0.0
    grown: float = 1.0
    stalled: float = 0.0
    heartbeat_age: float = 0.0
    bad: Reason = Reason.NONE
    bad_text: str = ''
    bad_in_a_row: int = 0
    heard_age: float = 0.0
    good_age: float = 0.0
    image_age: float = 0.0
    law_is_finite: bool = True
    condition: float = 1.0
    smallest: float = 1.0
    refusal: str = ''
    error_px: float = 0.0
    crowded: float = 0.0
    late_in_a_row: int = 0
    late: float = 0.0
    slept: float = 0.0
