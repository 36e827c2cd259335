# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The gate: one table that says what stops the camera, why, and what to do about it.

It is a pure function of a `Situation`. Rows are ordered from the most severe to the least; of all
rows that trip, the first one wins and gives its name. Every limit is checked on the allowed side
(`lo <= x <= hi`), so that a NaN trips by itself. A bad message counts as no message: it ages, and
when no good one has come within the watchdog's time, the row of the bad ones trips at any count.
"""

from __future__ import annotations

import enum
import math
import typing
from collections.abc import Callable

from servo_nodes.control.situation import Situation
from servo_nodes.values import Reason

GOOD_VIEWS = 3
ONLY_WHEN_IT_LASTS = 1_000_000_000


class Reaction(enum.Enum):
    """What a row does to an engaged loop."""

    FAULT = 'fault'
    STANDBY = 'standby'
    HOLD = 'hold'
    SLOW = 'slow'


class Row(typing.NamedTuple):
    """One row of the gate.

    Attributes
    ----------
    reason : Reason
    count : function of the situation: how many times in a row the row's condition is true now
    reaction : Reaction
    trigger : int, the count from which the row trips
    release : int, good views in a row, none of them while a row tripped, that end a hold
    sentence : function of the situation: value, limit, remedy
    refuses : bool, the row also refuses to engage
    always : bool, the row also acts on a loop that is not engaged
    """

    reason: Reason
    count: Callable[[Situation], int]
    reaction: Reaction
    trigger: int
    release: int
    sentence: Callable[[Situation], str]
    refuses: bool = True
    always: bool = False


def _dropped(reason: Reason, trigger: int) -> Callable[[Situation], int]:
    """Return the count of messages in a row dropped for `reason`; the trigger when it lasts."""
    def count(s: Situation) -> int:
        if s.bad is not reason:
            return 0
        return s.bad_in_a_row if s.good_age <= s.watchdog.timeout else trigger
    return count


def _text(remedy: str) -> Callable[[Situation], str]:
    """Return the sentence of a dropped message, which its judge has begun, with the remedy."""
    return lambda s: f'{s.bad_text}; {remedy}'


def _seconds(age: float) -> str:
    return f'for {age:.3f} s' if math.isfinite(age) else 'so far'


def _exception(s: Situation) -> int:
    return bool(s.exception)


def _halted(s: Situation) -> int:
    return s.halted


def _jumped(s: Situation) -> int:
    return s.jumped


def _camera_mismatch(s: Situation) -> int:
    return bool(s.camera_changed) or s.bad is Reason.CAMERA_MISMATCH


def _no_camera(s: Situation) -> int:
    return not s.calibrated


def _no_goal(s: Situation) -> int:
    return s.bad is Reason.NO_GOAL


def _second_publisher(s: Situation) -> int:
    return s.output.sole_publisher and not s.publishers <= 1


def _no_listener(s: Situation) -> int:
    return s.output.listener_required and not s.listeners >= 1


def _travel_limit(s: Situation) -> int:
    return not (s.travelled <= s.watchdog.travel and s.turned <= s.watchdog.turn)


def _diverging(s: Situation) -> int:
    return not s.grown < s.watchdog.diverging_growth


def _stalled(s: Situation) -> int:
    return not s.stalled <= s.watchdog.stalled_window


def _heartbeat_lost(s: Situation) -> int:
    return s.heartbeat.required and not (
        -s.watchdog.future_tolerance <= s.heartbeat_age <= s.heartbeat.timeout)


def _law_not_finite(s: Situation) -> int:
    return not s.law_is_finite


def _overrun(s: Situation) -> int:
    return s.late_in_a_row


def _slept(s: Situation) -> int:
    return not s.slept <= s.watchdog.timeout


def _features_silent(s: Situation) -> int:
    return not s.heard_age <= s.watchdog.timeout


def _too_old(s: Situation) -> int:
    return not s.image_age <= s.watchdog.staleness


def _ill_conditioned(s: Situation) -> int:
    return bool(s.refusal) or not (
        s.condition <= s.watchdog.condition and s.smallest >= s.watchdog.smallest)


def _crowded_out(s: Situation) -> int:
    return not s.crowded <= s.watchdog.crowd_hold


def _crowded(s: Situation) -> int:
    return not s.crowded <= s.watchdog.crowd_slow


def _row(reason: Reason, count: Callable[[Situation], int], reaction: Reaction,
         sentence: Callable[[Situation], str], *, trigger: int = 1, refuses: bool = True,
         always: bool = False) -> Row:
    release = GOOD_VIEWS if reaction is Reaction.HOLD else 0
    return Row(reason, count, reaction, trigger, release, sentence, refuses, always)


def _drop_row(reason: Reason, trigger: int, remedy: str) -> Row:
    return _row(reason, _dropped(reason, trigger), Reaction.HOLD, _text(remedy), trigger=trigger)


_FAULT, _HOLD = Reaction.FAULT, Reaction.HOLD

TABLE: tuple[Row, ...] = (
    _row(Reason.EXCEPTION, _exception, _FAULT, always=True, sentence=lambda s: (
        f'an error of the program, expected none, got {s.exception}; report it with the log, then '
        'reset and engage')),
    _row(Reason.HALTED, _halted, _FAULT, always=True, sentence=lambda s: (
        'the halt input was true, expected false; make the cell safe, release it, then reset and '
        'engage')),
    _row(Reason.CLOCK_JUMP, _jumped, Reaction.STANDBY, refuses=False, sentence=lambda s: (
        'the clock jumped, expected time to run forward; engage again when it runs')),
    _row(Reason.CAMERA_MISMATCH, _camera_mismatch, _FAULT, sentence=lambda s: (
        f'{s.camera_changed or s.bad_text}; use the camera the loop was started with, or reset '
        'and engage')),
    _row(Reason.NO_CAMERA, _no_camera, _FAULT, sentence=lambda s: (
        f'{s.camera_fault or "camera_info: expected a calibration, got none so far"}; calibrate '
        'the camera and publish its camera_info')),
    _row(Reason.NO_GOAL, _no_goal, _FAULT,
         sentence=_text('teach a goal or aim the tracker at one')),
    _row(Reason.SECOND_PUBLISHER, _second_publisher, _FAULT, sentence=lambda s: (
        f'{s.publishers} publishers of the command, at most 1 allowed; stop the others or set '
        'output.sole_publisher to false')),
    _row(Reason.NO_LISTENER, _no_listener, _FAULT, sentence=lambda s: (
        f"{s.listeners} listeners of the command, at least 1 needed; start the arm's driver, "
        'remap the topic, or set output.listener_required to false')),
    _row(Reason.TRAVEL_LIMIT, _travel_limit, _FAULT, refuses=False, sentence=lambda s: (
        f'moved {s.travelled:.3f} m and {s.turned:.2f} rad since it was engaged, at most '
        f"{s.watchdog.travel:g} m and {s.watchdog.turn:g} rad allowed; check the arm's axes and "
        'output.from_camera, or start nearer, or raise watchdog.travel or watchdog.turn')),
    _row(Reason.DIVERGING, _diverging, _FAULT, refuses=False, sentence=lambda s: (
        f'the error grew to {s.error_px:.1f} px, {s.grown:.2f} times within '
        f'{s.watchdog.diverging_window:g} s, less than {s.watchdog.diverging_growth:g} times '
        'allowed; check output.from_camera and the calibration, or lower law.gain')),
    _row(Reason.STALLED, _stalled, _FAULT, refuses=False, sentence=lambda s: (
        f'the error of {s.error_px:.1f} px made no progress for {s.stalled:.1f} s, at most '
        f'{s.watchdog.stalled_window:g} s allowed; check that the arm moves and that nothing '
        'blocks it, or start nearer to the goal')),
    _row(Reason.HEARTBEAT_LOST, _heartbeat_lost, _HOLD, sentence=lambda s: (
        f'no heartbeat {_seconds(s.heartbeat_age)}, at most {s.heartbeat.timeout:g} s allowed; '
        "check the operator's side, or set heartbeat.required to false")),
    _row(Reason.NOT_FINITE, _law_not_finite, _HOLD, sentence=lambda s: (
        "the law's twist: expected six finite numbers, got others; check depths and "
        'camera_info')),
    _drop_row(Reason.NOT_FINITE, 1, 'check the tracker and its depth image'),
    _row(Reason.OVERRUN, _slept, _HOLD, sentence=lambda s: (
        f'the loop did not run for {s.slept:.3f} s, at most {s.watchdog.timeout:g} s allowed; '
        'free a core, raise the priority, and let nothing pause the process')),
    _row(Reason.OVERRUN, _overrun, _HOLD, trigger=6, sentence=lambda s: (
        f'{s.late_in_a_row} ticks in a row came late, the last by {1e3 * s.late:.1f} ms, at most '
        '5 allowed; free a core, raise the priority, or lower rate')),
    _row(Reason.FEATURES_SILENT, _features_silent, _HOLD, sentence=lambda s: (
        f'no features {_seconds(s.heard_age)}, at most {s.watchdog.timeout:g} s allowed; check '
        'that the tracker runs and gets images')),
    _drop_row(Reason.IMAGE_SILENT, ONLY_WHEN_IT_LASTS, 'check the camera and its driver'),
    _drop_row(Reason.FEATURES_STALE, 1, 'shorten the way from camera to tracker, or raise '
              'watchdog.staleness'),
    _drop_row(Reason.STAMP_FUTURE, 3, 'set the clocks of both machines right'),
    _drop_row(Reason.STAMP_BACKWARD, 3, 'stop a second tracker, or disengage and reset'),
    _drop_row(Reason.STAMP_ZERO, 3, 'let the camera driver stamp its images, or set '
              'watchdog.zero_stamp to receive'),
    _drop_row(Reason.TOO_FEW_POINTS, 1, 'bring the target into view, light it, or teach it anew'),
    _row(Reason.FEATURES_STALE, _too_old, _HOLD, sentence=lambda s: (
        f'the newest image is {s.image_age:.3f} s old, at most {s.watchdog.staleness:g} s '
        'allowed; shorten the way from camera to tracker, or raise watchdog.staleness')),
    _row(Reason.ILL_CONDITIONED, _ill_conditioned, _HOLD, sentence=lambda s: s.refusal or (
        f'condition {s.condition:.3g} and smallest singular value {s.smallest:.2g}, at most '
        f'{s.watchdog.condition:g} and at least {s.watchdog.smallest:g} allowed; spread the '
        'points over the image or bring the camera nearer')),
    _row(Reason.LEAVING_VIEW, _crowded_out, _HOLD, sentence=lambda s: (
        f'{100 * s.crowded:.0f} % of the points crowd the image border, at most '
        f'{100 * s.watchdog.crowd_hold:.0f} % allowed; start nearer to the goal or choose another '
        'law.kind')),
    _row(Reason.LEAVING_VIEW, _crowded, Reaction.SLOW, refuses=False, sentence=lambda s: (
        f'{100 * s.crowded:.0f} % of the points crowd the image border, full speed up to '
        f'{100 * s.watchdog.crowd_slow:.0f} %; start nearer to the goal or choose another '
        'law.kind')),
)

REFUSING = tuple(row for row in TABLE if row.refuses)
SEVERITY = {reason: min(rank for rank, row in enumerate(TABLE) if row.reason is reason)
            for reason in dict.fromkeys(row.reason for row in TABLE)}


def verdict(situation: Situation, rows: tuple[Row, ...] = TABLE) -> Row | None:
    """Return the most severe row that trips, or None: the camera may move."""
    for row in rows:
        if row.count(situation) >= row.trigger:
            return row
    return None


def slowdown(situation: Situation) -> float:
    """Return the share of the speed, 0..1, that is left when points crowd the image border."""
    slow, hold = situation.watchdog.crowd_slow, situation.watchdog.crowd_hold
    if situation.crowded <= slow:
        return 1.0
    if not situation.crowded < hold:
        return 0.0
    return (hold - situation.crowded) / (hold - slow)
