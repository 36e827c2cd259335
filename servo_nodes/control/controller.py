# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller: views and time in, commands out; composes servo, gate and states.

What comes from outside is only noted; `command` judges it and always answers. The one clock is
steady, in integer ns; whoever hands over a view translates its stamp. `observe`, `refuse`, `halt`,
`heartbeat`, `graph`, `overrun`, `jump` may come from another thread; the others must not overlap.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from servo_nodes.camera import Camera
from servo_nodes.control import gate, states
from servo_nodes.control.gate import Reaction, Row
from servo_nodes.control.progress import Progress
from servo_nodes.control.servo import Servo, Solution
from servo_nodes.control.settings import ControllerSettings, fixed_change
from servo_nodes.control.situation import Situation
from servo_nodes.control.states import ENGAGED, MOVING, Event
from servo_nodes.control.surroundings import Surroundings
from servo_nodes.control.survey import broken, figures, surveyed
from servo_nodes.control.tool import REST, Numbers, Outlet
from servo_nodes.control.watch import Intake, age
from servo_nodes.values import Answer, Command, Reason, Stamp, State, Twist, View

_EVENTS = {Reaction.FAULT: Event.FAULT, Reaction.STANDBY: Event.JUMP, Reaction.HOLD: Event.HOLD}


class Controller:
    """Decides, at any time, what the camera may do.

    Parameters
    ----------
    settings : ControllerSettings
    servo : Servo, another source of raw twists; None builds the one the settings ask for
    """

    def __init__(self, settings: ControllerSettings, *, servo: Servo | None = None) -> None:
        self._settings = settings
        self._servo = servo or Servo(settings.law)
        self._intake = Intake(settings.watchdog)
        self._outlet = Outlet(settings.caps, settings.output)
        self._around = Surroundings()
        self._progress = Progress()
        self._state = State.STANDBY
        self._reason, self._detail, self._release = Reason.NONE, '', 0
        self._starting = self._jumping = self._jumped = False
        self._sent: Numbers = REST
        self._wanted: Numbers = REST
        self._ratio = 1.0
        self._ticked: Stamp | None = None
        self._view: View | None = None
        self._solution: Solution | None = None
        self._error: Exception | None = None

    @property
    def settings(self) -> ControllerSettings:
        """Return the settings in force."""
        return self._settings

    @property
    def state(self) -> State:
        """Return the state as of the last decision or request."""
        return self._state

    @property
    def error(self) -> Exception | None:
        """Return the exception that poisoned the controller, for the log; None when it is well."""
        return self._error

    @property
    def dropped(self) -> Mapping[Reason, int]:
        """Return how many views were dropped (stamp_zero: restamped) for each reason so far."""
        return self._intake.counts

    def calibrate(self, camera: Camera) -> None:
        """Take the camera the views are measured with; another one while engaged is a fault."""
        if self._around.calibrate(camera, engaged=self._state in ENGAGED):
            self._intake.camera = camera
            self._servo.calibrate(camera)

    def observe(self, view: View, received: Stamp | None = None) -> None:
        """Store a view, received at `received`, ns; None: at the time of the next command."""
        self._intake.post(view, received)

    def refuse(self, reason: Reason, text: str) -> None:
        """Take note of an input that had to be dropped, and why: *expected ..., got ...*.

        With `no_camera` it was a calibration, which the next good one makes up for; with any other
        reason it was features.
        """
        if reason is Reason.NO_CAMERA:
            self._around.camera_fault = text
        else:
            self._intake.post_fault(reason, text)

    def halt(self, on: bool) -> None:
        """Stop now and latch when `on`; going off does not release it, `reset` does."""
        self._around.set_halt(on)

    def heartbeat(self, now: Stamp) -> None:
        """Take note that the operator's side is there, at `now`, ns."""
        self._around.beat = now

    def graph(self, listeners: int, publishers: int) -> None:
        """Take how many listen to the command and how many publish it, this one included."""
        self._around.listeners, self._around.publishers = listeners, publishers

    def overrun(self, late_ns: int) -> None:
        """Take note that the coming tick is late by `late_ns`; call it before `command`."""
        self._around.set_late(late_ns)

    def jump(self) -> None:
        """Stand by and forget all times: the clock of the stamps was set under us."""
        self._jumping = True

    def engage(self, on: bool) -> Answer:
        """Start or stop the loop; starting is refused with value, limit and remedy."""
        if not on:
            self._turn(Event.DISENGAGE)
            return Answer(True, f'the loop is off; state {self._state.value}')
        if self._state in ENGAGED:
            return Answer(True, f'the loop is on already; state {self._state.value}')
        if self._state is State.FAULTED:
            return Answer(False, f'{self._reason.value}: {self._detail}')
        self._jumped = False
        now = self._newest()
        try:
            if now is not None:
                self._take(now)
        except Exception as error:
            self._poison(error)
            return Answer(False, f'{self._reason.value}: {self._detail}')
        row = gate.verdict(situation := self._situation(now), gate.REFUSING)
        if row is not None:
            return Answer(False, f'{row.reason.value}: {row.sentence(situation)}')
        self._start(Event.ENGAGE)
        return Answer(True, 'the loop is on')

    def reset(self) -> Answer:
        """Leave a latched fault; refused while the loop is on or the halt input is."""
        if self._state in ENGAGED:
            return Answer(False, f'reset: expected state faulted, got {self._state.value}; '
                          'disengage first')
        if self._around.halt:
            return Answer(False, 'halt: expected false, got true; release the halt input first')
        self._forget()
        self._around.release()
        self._jumped, self._error = False, None
        self._reason, self._detail = Reason.NONE, ''
        self._progress.restart()
        self._turn(Event.RESET)
        return Answer(True, 'reset; engage to start')

    def adopt(self, settings: ControllerSettings) -> Answer:
        """Replace the settings as a whole, or refuse to change what is fixed."""
        text = fixed_change(self._settings, settings)
        if text:
            return Answer(False, text)
        self._outlet = Outlet(settings.caps, settings.output)
        self._servo.settings, self._intake.settings = settings.law, settings.watchdog
        self._settings = settings
        return Answer(True, 'the settings are in force')

    def command(self, now: Stamp) -> Command:
        """Decide what the camera does from `now`, ns, on; always answers, never raises."""
        try:
            if self._error is None:
                self._decide(now)
                return self._answer(now, figures(self._around, self._intake, self._progress,
                                                 self._solution, now, ratio=self._ratio))
        except Exception as error:
            self._poison(error)
        return self._answer(now, {})

    def _poison(self, error: Exception) -> None:
        """Stand still until a reset: nothing in here can be trusted any more."""
        self._error = error
        situation = broken(self._settings, error)
        self._name(gate.verdict(situation), situation)
        self._sent = REST
        self._turn(Event.FAULT)

    def _decide(self, now: Stamp) -> None:
        if self._jumping or (self._ticked is not None and now < self._ticked):
            self._forget()
            self._jumping, self._jumped = False, True
        duration = 0.0 if self._ticked is None else age(self._ticked, now)
        self._ticked = now
        self._progress.leash.add(self._sent, duration)
        self._intake.moved(self._sent, duration)
        self._around.tick(duration)
        self._sent = self._sent if duration <= self._settings.watchdog.timeout else REST
        self._take(now)
        if self._state in ENGAGED:
            if self._starting:
                self._starting = False
                self._servo.begin(now)
                self._progress.begin()
            self._solve(now)
            if self._solution is not None and self._state in MOVING:
                self._progress.add(self._solution, self._wanted, self._view, now,
                                   self._settings)
        situation = self._situation(now)
        self._judge(situation)
        self._move(situation, duration)
        self._servo.record(np.array(self._sent), now)

    def _take(self, now: Stamp) -> None:
        """Judge what came, in order of arrival; a loop that is off still shows the error."""
        fresh = False
        for view in self._intake.judged(now):
            self._servo.observe(view)
            self._view, fresh = view, True
        if fresh and self._state not in ENGAGED:
            self._solve(now)

    def _newest(self) -> Stamp | None:
        """Return the newest time that was told, by a tick or with a view; None before any."""
        times = [time for time in (self._ticked, self._intake.told) if time is not None]
        return max(times, default=None)

    def _solve(self, now: Stamp) -> None:
        solution = self._solution = self._servo.solve(now)
        self._wanted = REST if solution is None else solution.twist.tolist()

    def _situation(self, now: Stamp | None) -> Situation:
        return surveyed(self._settings, self._around, self._intake, self._progress,
                        self._solution, self._wanted, now, jumped=self._jumped)

    def _judge(self, situation: Situation) -> None:
        """Let the gate's verdict, or the loop's progress, turn the state."""
        if self._state is State.FAULTED:
            return
        row = gate.verdict(situation)
        if row is not None and row.reaction is not Reaction.SLOW:
            self._intake.good_in_a_row = 0
            self._name(row, situation)
            if self._state in ENGAGED or row.always:
                self._turn(_EVENTS[row.reaction])
        elif self._state is State.HOLDING:
            if self._intake.good_in_a_row >= self._release and not any(self._sent):
                self._start(Event.RELEASE)
        else:
            self._name(row, situation)
            self._turn(Event.SETTLE if self._progress.settling.is_home else Event.LEAVE)

    def _name(self, row: Row | None, situation: Situation) -> None:
        """Take over the reason, the sentence and the release of `row`."""
        if row is None:
            self._reason, self._detail, self._release = Reason.NONE, '', 0
        else:
            self._reason, self._detail = row.reason, row.sentence(situation)
            self._release = row.release

    def _start(self, event: Event) -> None:
        """Let the next tick begin from rest."""
        self._starting, self._reason, self._detail = True, Reason.NONE, ''
        self._turn(event)

    def _move(self, situation: Situation, duration: float) -> None:
        """Find the twist that goes out, camera in its optical frame."""
        self._ratio = 1.0
        if self._state is State.HOLDING:
            self._sent = self._outlet.braked(self._sent, duration)
        elif self._state in MOVING and not self._starting:
            slow = gate.slowdown(situation)
            wanted = [slow * part for part in self._wanted]
            self._ratio = self._outlet.ratio(wanted)
            self._sent = self._outlet.next(self._sent, wanted,
                                           min(duration, 2.0 / self._settings.rate))
        else:
            self._sent = REST

    def _turn(self, event: Event) -> None:
        before, self._state = self._state, states.after(self._state, event)
        if self._state in ENGAGED:
            return
        self._sent, self._starting = REST, False
        if before in ENGAGED:
            self._servo.rest()
            if self._state is State.STANDBY:
                self._progress.restart()

    def _forget(self) -> None:
        self._intake.forget()
        self._servo.reset()
        self._ticked = self._view = self._solution = None
        self._wanted = REST

    def _answer(self, now: Stamp, figures: Mapping[str, float]) -> Command:
        solution, camera = self._solution, self._around.camera
        frame = self._outlet.frame or ('' if camera is None else camera.frame_id)
        stamp = None if solution is None else solution.view_stamp
        return Command(Twist(self._outlet.expressed(self._sent), frame), self._state, self._reason,
                       self._detail, now, stamp, figures)
