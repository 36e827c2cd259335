# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The survey: reads intake, surroundings, progress and law, and fills in the gate's form."""

from __future__ import annotations

import math
from collections.abc import Sequence

from servo_nodes.control.progress import Progress
from servo_nodes.control.servo import Solution
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.control.situation import Situation
from servo_nodes.control.surroundings import Surroundings
from servo_nodes.control.watch import Intake, age
from servo_nodes.values import Stamp


def surveyed(settings: ControllerSettings, around: Surroundings, intake: Intake,
             progress: Progress, solution: Solution | None, twist: Sequence[float],
             now: Stamp | None, *, jumped: bool) -> Situation:
    """Return the situation at `now`, ns; None when no time was told yet.

    `twist` is the solution's, as 6 numbers, whose sum is finite only when all of them are.
    """
    if solution is None:
        law_is_finite, condition, smallest, refusal, error_px = True, math.inf, 0.0, '', math.nan
    else:
        law_is_finite = math.isfinite(sum(twist))
        condition, smallest = solution.condition, solution.smallest
        refusal, error_px = solution.refusal, solution.error_px
    return Situation(
        settings.watchdog, settings.heartbeat, settings.output,
        halted=around.halted, jumped=jumped,
        calibrated=around.camera is not None and not around.camera_fault,
        camera_fault=around.camera_fault, camera_changed=around.camera_changed,
        publishers=around.publishers, listeners=around.listeners,
        travelled=progress.leash.travelled, turned=progress.leash.turned,
        grown=progress.growth.ratio, stalled=progress.stall.seconds,
        heartbeat_age=age(around.beat, now),
        bad=intake.bad, bad_text=intake.bad_text, bad_in_a_row=intake.bad_in_a_row,
        heard_age=age(intake.heard, now), good_age=age(intake.good, now),
        image_age=age(intake.image, now), law_is_finite=law_is_finite, condition=condition,
        smallest=smallest, refusal=refusal, error_px=error_px, crowded=intake.crowded,
        late_in_a_row=around.late_in_a_row, late=around.late,
        slept=around.slept)


def broken(settings: ControllerSettings, error: Exception) -> Situation:
    """Return the situation after an error of ours; nothing but the error is to be trusted."""
    return Situation(settings.watchdog, settings.heartbeat, settings.output,
                     exception=f'{type(error).__name__}: {error}')


def figures(around: Surroundings, intake: Intake, progress: Progress, solution: Solution | None,
            now: Stamp, *, ratio: float) -> dict[str, float]:
    """Return what a command says about the loop; what rests on a view is absent without one."""
    found = {'ratio': ratio, 'travelled': progress.leash.travelled,
             'turned': progress.leash.turned, 'good_views': float(intake.good_in_a_row),
             'dropped': float(intake.dropped), 'late_ticks': float(around.late_in_a_row)}
    if solution is not None:
        found.update(error_px=solution.error_px, condition=solution.condition,
                     smallest=solution.smallest, points=float(solution.points),
                     gain=solution.gain, left=solution.left, crowded=intake.crowded,
                     latency_ms=1e3 * age(solution.view_stamp, now))
    return found
