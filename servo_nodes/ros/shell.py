# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the three nodes share: managed states, parameters, words and time."""

from __future__ import annotations

import gc
import time
import traceback
import typing
from collections.abc import Callable, Mapping

from lifecycle_msgs.msg import State
from rcl_interfaces.msg import SetParametersResult
from rclpy.clock import Clock, ClockType
from rclpy.lifecycle import LifecycleNode, TransitionCallbackReturn

from servo_nodes.ros.diagnostics import ERROR, WARN
from servo_nodes.ros.doors import Doors
from servo_nodes.ros.limiter import Limiter
from servo_nodes.ros.options import ShellSettings
from servo_nodes.ros.parameters import Parameters
from servo_nodes.values import SECOND_NS


class Shell(LifecycleNode):
    """A managed node whose parameters are settings dataclasses.

    Subclasses say what to do in `configure`, `activate`, `deactivate`, `cleanup` (each returns a
    sentence when it must refuse, else nothing), `rest` and `adopt`.
    """

    def __init__(self, name: str, *classes: type) -> None:
        super().__init__(name)
        self.steady_clock = Clock(clock_type=ClockType.STEADY_TIME)
        self.limiter = Limiter()
        self.doors = Doors(self)
        self.failure: BaseException | None = None
        self.call_end: Callable[[], None] = lambda: None
        self.active = False
        self.configured = False
        self._clock_seen = 0
        self.parameters: Parameters | None = None
        self.parameters = Parameters(self, ShellSettings, *classes)

    # -- what a subclass fills in

    def configure(self) -> str:
        """Make the core, the publishers and the subscriptions."""
        return ''

    def activate(self) -> str:
        """Start working."""
        return ''

    def deactivate(self) -> str:
        """Stop working; what moves is at rest when this returns."""
        return ''

    def cleanup(self) -> None:
        """Give back what `configure` made beside the doors."""

    def rest(self) -> None:
        """Say the last words on the wire; called once, whatever ends the process."""

    def own_process(self) -> None:
        """Set up the process, when it is ours alone."""

    def adopt(self, settings: Mapping[type, object]) -> str:
        """Put changed settings in force, or return the sentence that refuses them."""
        return ''

    # -- transitions

    def start(self) -> None:
        """Configure and activate, when `autostart` says so."""
        if not self.parameters[ShellSettings].autostart:
            self.get_logger().info('autostart is false: waiting for a lifecycle manager')
        elif self.trigger_configure() == TransitionCallbackReturn.SUCCESS:
            self.trigger_activate()

    def on_configure(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition."""
        result = self._answered('configure', self.configure())
        if result == TransitionCallbackReturn.SUCCESS:
            self.configured = True
            for sentence in self.parameters.unknown():
                self.get_logger().warning(sentence)
            gc.collect()
            gc.freeze()
        return result

    def on_activate(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition."""
        result = self._answered('activate', self.activate())
        self.active = result == TransitionCallbackReturn.SUCCESS
        return result

    def on_deactivate(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition."""
        result = self._answered('deactivate', self.deactivate())
        self.active = False
        return result

    def on_cleanup(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition."""
        self._closed()
        return self._answered('cleanup', '')

    def on_shutdown(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition: come to rest."""
        return self._undone('shutdown')

    def on_error(self, state: State) -> TransitionCallbackReturn:
        """Answer the transition: come to rest and start anew from unconfigured."""
        return self._undone('error')

    def _undone(self, transition: str) -> TransitionCallbackReturn:
        if self.active:
            self.deactivate()
            self.active = False
        self._closed()
        return self._answered(transition, '')

    def _closed(self) -> None:
        if self.configured:
            self.configured = False
            self.cleanup()
            self.doors.close()

    def _answered(self, transition: str, refusal: str) -> TransitionCallbackReturn:
        if refusal:
            self.get_logger().error(f'{transition} refused: {refusal}')
            return TransitionCallbackReturn.FAILURE
        return TransitionCallbackReturn.SUCCESS

    # -- parameters

    def set_parameters_atomically(self, parameter_list: list[typing.Any]) -> SetParametersResult:
        """Take a set of parameters whole, or refuse it whole with one sentence."""
        if self.parameters is None:
            return super().set_parameters_atomically(parameter_list)
        try:
            changes, settings = self.parameters.judged(parameter_list)
        except ValueError as error:
            return SetParametersResult(successful=False, reason=str(error))
        refusal = self.adopt(settings) if settings else ''
        if refusal:
            return SetParametersResult(successful=False, reason=refusal)
        result = super().set_parameters_atomically(changes)
        if result.successful:
            for sentence in self.parameters.take(settings):
                self.get_logger().info(f'parameter {sentence}')
        return result

    def set_parameters(self, parameter_list: list[typing.Any]) -> list[SetParametersResult]:
        """Take parameters one by one."""
        return [self.set_parameters_atomically([parameter]) for parameter in parameter_list]

    # -- words and time

    def tell(self, level: bytes, text: str) -> None:
        """Log at a level of the diagnostics; each has a line of its own, as the logger demands."""
        if level == ERROR:
            self.get_logger().error(text)
        elif level == WARN:
            self.get_logger().warning(text)
        else:
            self.get_logger().info(text)

    def warn_seldom(self, key: str, text: str) -> None:
        """Log a fault at most once in a few seconds, with the count of what was kept back."""
        said = self.limiter.passed(key, text)
        if said is not None:
            self.get_logger().warning(said)

    def now_ns(self) -> int:
        """Return the node's clock, for stamps."""
        return int(self.get_clock().now().nanoseconds)

    def every(self, period: float, callback: Callable[[], None]) -> typing.Any:
        """Call back on the steady clock, which nobody can set."""
        return self.create_timer(period, callback, clock=self.steady_clock)

    def clock_fault(self) -> str:
        """Return the sentence for a simulated time that stands still or never came, or nothing."""
        if not self.get_clock().ros_time_is_active:
            return ''
        now, before = self.now_ns(), self._clock_seen
        self._clock_seen = now
        if now == 0:
            return 'use_sim_time is true: expected messages on /clock, got none; nothing will move'
        return '' if now != before else 'use_sim_time is true and /clock stands still'

    def fail(self, error: BaseException) -> None:
        """End the process after an unexpected exception: words now, rest next."""
        if self.failure is None:
            self.failure = error
            words = ''.join(traceback.format_exception(type(error), error, error.__traceback__))
            self.get_logger().error(f'ending after an unexpected error\n{words}')
            self.call_end()


def pause(seconds: float) -> None:
    """Wait on the steady clock."""
    until = time.monotonic_ns() + round(seconds * SECOND_NS)
    while (left := until - time.monotonic_ns()) > 0:
        time.sleep(left / SECOND_NS)
