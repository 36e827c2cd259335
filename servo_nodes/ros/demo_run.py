# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The demo's acts: teach, move away, engage, watch it come home, look at what came of it."""

from __future__ import annotations

import math
import statistics
import time
import typing
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from servo_nodes.report.record import Event, Scalar
from servo_nodes.ros.demo_processes import Trouble
from servo_nodes.ros.demo_watch import Watch, offsets, plain_value, speeds
from servo_nodes.values import SECOND_NS, Floats, Stamp, State

HOME_DISTANCE_M = 0.42
READY_S, SEEN_S, LINGER_S = 30.0, 10.0, 1.0
MOST_MM, MOST_DEG = 0.4, 0.06
FIRST_FAULT_S, FAULT_S = 0.8, 1.0
# A page of many stops must still be light enough to mail.
MOST_PICTURED = 5
FAULTS: Mapping[str, Mapping[str, bool | float]] = {
    'occlusion': {'faults.black': 1.0}, 'stall': {'faults.drop': 1.0},
    'freeze': {'faults.freeze': True}}


@dataclass(frozen=True)
class Start:
    """Where the camera is put: metres and degrees (a rotation vector), in its taught frame."""

    translation: tuple[float, float, float] = (0.05, -0.04, -0.10)
    rotation_deg: tuple[float, float, float] = (6.0, -5.0, 20.0)

    def words(self) -> str:
        """Return it as a person would say it."""
        x, y, z = (f'{1000 * value:.0f}' for value in self.translation)
        a, b, c = (f'{value:g}' for value in self.rotation_deg)
        return f'{x}, {y}, {z} mm and {a}, {b}, {c} deg'


@dataclass
class Outcome:
    """What a run came to; `settle_s` is None when the loop never settled."""

    settled: bool = False
    settle_s: float | None = None
    position_error_mm: float = math.nan
    angle_error_deg: float = math.nan
    error_px: float = math.nan
    state: str = ''
    reason: str = 'none'
    detail: str = ''
    stops: int = 0
    parameters: dict[str, dict[str, Scalar]] = field(default_factory=dict)

    @property
    def good(self) -> bool:
        """Return whether the camera came home as truly as we promise."""
        return (self.settled and self.position_error_mm <= MOST_MM
                and self.angle_error_deg <= MOST_DEG)


class Run:
    """One demo; `say` takes lines for the reader, `show` the progress of the moment."""

    def __init__(self, watch: Watch, start: Start, *, faults: Sequence[str] = (), timeout: float,
                 bag: typing.Any = None, say: Callable[[str], None],
                 show: Callable[[str], None]) -> None:
        self._watch, self._start, self._timeout = watch, start, timeout
        self._say, self._show, self._bag = say, show, bag
        self._faults = [(FIRST_FAULT_S + 2 * FAULT_S * index, kind)
                        for index, kind in enumerate(faults)]
        self._fault_ends: Stamp | None = None
        self._parameters: dict[str, dict[str, typing.Any]] = {}
        self._home: Floats | None = None
        self._engaged: Stamp = 0
        self._settled: Stamp | None = None
        self._state: State | None = None
        self._due: list[tuple[Stamp, str]] = []
        self.outcome = Outcome()

    def play(self) -> Outcome:
        """Do everything; the loop is off at the end.

        Raises
        ------
        Trouble
            When a node is missing, dies, or refuses.
        """
        self._wait_for_nodes()
        self._teach()
        self._move_away()
        self._engage()
        self._come_home()
        self._judge()
        return self.outcome

    def _wait_for_nodes(self) -> None:
        watch = self._watch
        if not watch.spin_until(lambda: watch.images >= 5 and watch.camera is not None
                                and watch.pose is not None and watch.state is not None, READY_S):
            there = {'image': watch.images >= 5, 'camera_info': watch.camera is not None,
                     'true_pose': watch.pose is not None,
                     'controller/state': watch.state is not None}
            raise Trouble(f'{", ".join(name for name in there if not there[name])}: expected '
                          f'messages within {READY_S:g} s, got none')
        for node in ('tracker', 'controller', 'simulator'):
            self._parameters[node] = watch.parameters(node)
            self.outcome.parameters[node] = {
                name: plain_value(value) for name, value in self._parameters[node].items()}
        caps = self.outcome.parameters['controller']
        watch.caps = float(caps['caps.linear']), float(caps['caps.angular'])

    def _teach(self) -> None:
        watch = self._watch
        answer = watch.trigger('tracker/teach')
        if not answer.ok:
            raise Trouble(f'tracker/teach: expected a goal view, got a refusal: {answer.text}')
        self._home = watch.pose
        watch.keep_picture('goal', 'The view it was taught', plain=True)
        self._say(f'{answer.text[:1].upper()}{answer.text[1:]}.')

    def _move_away(self) -> None:
        watch = self._watch
        rotation = tuple(math.radians(value) for value in self._start.rotation_deg)
        answer = watch.set_parameters('simulator', {
            'start.translation': tuple(map(float, self._start.translation)),
            'start.rotation': rotation})
        if not answer.ok:
            raise Trouble(f'simulator: expected it to take the start, got: {answer.text}')
        answer = watch.trigger('simulator/restart')
        if not answer.ok:
            raise Trouble(f'simulator/restart: expected a new start, got: {answer.text}')
        begun, pose = watch.images, self._home
        watch.spin_until(lambda: watch.images > begun + 3 and watch.pose is not pose, 2.0)
        stamp = time.time_ns()
        if not watch.spin_until(lambda: watch.view is not None and len(watch.view) > 0
                                and watch.view.stamp > stamp, SEEN_S):
            raise Trouble('features: expected the goal to be seen from the start within '
                          f'{SEEN_S:g} s, got nothing; start nearer to home')
        watch.recording = True
        if self._bag is not None:
            self._bag.begin(self._parameters)
        watch.recorder.turn(Event(time.time_ns(), str(watch.state and watch.state.value)))
        watch.spin_until(lambda: False, 0.5)
        self._say(f'Moved away by {self._start.words()}; error {watch.error_px:.1f} px.')

    def _engage(self) -> None:
        watch, answer = self._watch, None

        def engaged() -> bool:
            nonlocal answer
            answer = watch.engage(True)
            return answer.ok
        if not watch.spin_until(engaged, 5.0) and answer is not None:
            raise Trouble(f'controller/engage: expected it to start, got: {answer.text}')
        self._engaged = time.time_ns()
        self._say('Engaged.')
        watch.spin_until(lambda: bool(np.any(watch.twist)) or watch.state is State.HOLDING, 1.0)
        watch.keep_picture('start', 'The start: every dot on its way to its diamond')

    def _come_home(self) -> None:
        watch = self._watch

        def done() -> bool:
            self._follow()
            if watch.state is State.FAULTED:
                return True
            if self._faults or self._fault_ends is not None:
                return False
            return self._settled is not None and (
                time.time_ns() - self._settled > LINGER_S * SECOND_NS)
        watch.spin_until(done, self._timeout, self._progress)
        watch.keep_picture('end', 'The end: every dot in its diamond' if self._settled
                           else 'Where it was when the demo ended')

    def _follow(self) -> None:
        """Note changes of state, and picture what surrounds a stop."""
        watch, now = self._watch, time.time_ns()
        for due, caption in [item for item in self._due if item[0] <= now]:
            self._due.remove((due, caption))
            watch.keep_picture('stop', caption)
        if watch.state is self._state:
            return
        before, self._state = self._state, watch.state
        if watch.state is State.SETTLED:
            self._settled = now
        elif watch.state in (State.SERVOING, State.HOLDING):
            self._settled = None
        if watch.state in (State.HOLDING, State.FAULTED):
            self.outcome.stops += 1
            if self.outcome.stops <= MOST_PICTURED:
                watch.keep_picture('stop', 'as it stopped')
                self._due.append((now + SECOND_NS // 2, 'half a second later'))
        elif before is State.HOLDING and self.outcome.stops <= MOST_PICTURED:
            watch.keep_picture('stop', 'as it moved on')
        reason = '' if watch.reason == 'none' else f' ({watch.reason}: {watch.detail})'
        if watch.state is not None:
            self._say(f'{self._seconds(now):6.2f} s  {watch.state.value}{reason}')

    def _disturb(self) -> None:
        """Let the planned faults begin and end."""
        now = time.time_ns()
        if self._fault_ends is not None and now >= self._fault_ends:
            self._fault_ends = None
            self._watch.set_parameters('simulator', {name: type(value)(0) for values in
                                                     FAULTS.values() for name, value in
                                                     values.items()})
            self._say(f'{self._seconds(now):6.2f} s  the fault is over')
        elif self._faults and self._seconds(now) >= self._faults[0][0]:
            kind = self._faults.pop(0)[1]
            self._say(f'{self._seconds(now):6.2f} s  fault: {kind}')
            self._watch.set_parameters('simulator', FAULTS[kind])
            self._fault_ends = now + round(FAULT_S * SECOND_NS)

    def _progress(self) -> None:
        watch = self._watch
        self._disturb()
        if watch.state is None:
            return
        linear, angular = speeds(watch.twist)
        self._show(f'{self._seconds(time.time_ns()):6.2f} s  {watch.state.value:9}'
                   f'error {watch.error_px:7.2f} px   {linear:5.1f} mm/s  {angular:5.1f} deg/s')

    def _seconds(self, stamp: Stamp) -> float:
        return (stamp - self._engaged) / SECOND_NS

    def _judge(self) -> None:
        watch, outcome = self._watch, self.outcome
        watch.recording = False
        outcome.state = watch.state.value if watch.state else ''
        outcome.reason, outcome.detail = watch.reason, watch.detail
        outcome.settled = self._settled is not None
        if self._settled is not None:
            outcome.settle_s = self._seconds(self._settled)
        errors = watch.recorder.recent('error', 15)
        outcome.error_px = statistics.median(errors) if errors else math.nan
        if self._home is not None and watch.poses:
            rows = offsets(watch.poses, self._home)
            watch.recorder.declare('offset', 'm, rad', 'x', 'y', 'z', 'rx', 'ry', 'rz')
            for stamp, row in rows:
                watch.recorder.note('offset', stamp, *row)
            last = rows[-1][1]
            outcome.position_error_mm = 1000 * float(np.linalg.norm(last[:3]))
            outcome.angle_error_deg = math.degrees(float(np.linalg.norm(last[3:])))
        watch.engage(False)
