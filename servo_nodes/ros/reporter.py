# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the controller says beside its commands, from a thread of its own: state, figures,
diagnostics.

The control thread only leaves a note here, so that no listener, log or graph query can make it
late.
"""

from __future__ import annotations

import queue
import threading
import time
import traceback
import typing

from diagnostic_msgs.msg import DiagnosticStatus
from std_msgs.msg import Float64

from servo_nodes.control.states import ENGAGED
from servo_nodes.ros.diagnostics import (
    ERROR,
    OK,
    WARN,
    Diagnostics,
    parameter_hash,
    status,
    versions,
)
from servo_nodes.ros.meters import Arrivals, Durations
from servo_nodes.values import SECOND_NS, Command, Stamp, State, View

SCALARS = ('error_px', 'condition', 'latency_ms')
STATE_PERIOD_NS = SECOND_NS // 2
_LEVELS = {State.FAULTED: ERROR, State.HOLDING: WARN}


class Reporter:
    """Publishes `~/state`, the scalars and `/diagnostics`, and feeds the graph to the controller.

    Parameters
    ----------
    node : ControllerNode
    command : publisher of the command, whose listeners are counted
    """

    def __init__(self, node: typing.Any, command: typing.Any) -> None:
        self._node, self._command = node, command
        self._notes: queue.SimpleQueue[Command | None] = queue.SimpleQueue()
        self._state = node.doors.publish(DiagnosticStatus, '~/state')
        self._scalars = {name: node.doors.publish(Float64, f'~/{name}') for name in SCALARS}
        self._diagnostics = Diagnostics(node, 'control')
        self._views = Arrivals()
        self._late, self._work = Durations('late'), Durations('tick')
        self._thread: threading.Thread | None = None
        self._said: tuple[object, ...] = ()
        self._noted: tuple[object, ...] = ()
        self._second = self._stated = 0
        self._overruns = self._scaled = self._moving = 0

    def begin(self) -> None:
        """Start the thread."""
        self.count_graph()
        self._thread = threading.Thread(target=self._run, name='reporter', daemon=True)
        self._thread.start()

    def end(self) -> None:
        """Say what is still to be said, and stop."""
        self._notes.put(None)
        if self._thread is not None and self._thread is not threading.current_thread():
            self._thread.join(0.5)
        self._thread = None

    def note(self, command: Command, late: Stamp, work: Stamp) -> None:
        """Take a decision of the control thread, how late it was and how long it took, in ns."""
        self._late.add(late)
        self._work.add(work)
        if late > SECOND_NS / self._node.controller.settings.rate:
            self._overruns += 1
        if command.state in ENGAGED:
            self._moving += 1
            self._scaled += command.figures.get('ratio', 1.0) < 1.0
        told = (command.state, command.reason, command.view_stamp)
        if told != self._noted or command.decided - self._second >= SECOND_NS // 4:
            self._noted, self._second = told, command.decided
            self._notes.put(command)

    def take_view(self, view: View, received: Stamp, node_now: Stamp) -> None:
        """Count a view that came in."""
        self._views.add(view.stamp, received, node_now - view.stamp)

    def count_graph(self) -> None:
        """Tell the controller who listens to the command and who else publishes it."""
        topic = self._command.topic_name
        self._node.controller.graph(self._command.get_subscription_count(),
                                    self._node.count_publishers(topic))

    def _run(self) -> None:
        due = time.monotonic_ns()
        try:
            while (command := self._notes.get()) is not None:
                changed = (command.state, command.reason) != self._said
                self._said = (command.state, command.reason)
                now = time.monotonic_ns()
                if changed:
                    self._log(command)
                if changed or now - self._stated >= STATE_PERIOD_NS:
                    self._stated = now
                    self._publish_state(command)
                self._publish_scalars(command)
                if changed or now >= due:
                    self._diagnose(command, on_change_only=now < due)
                if now >= due:
                    due = now + SECOND_NS
                    self.count_graph()
        except Exception as error:
            self._node.fail(error)

    def _log(self, command: Command) -> None:
        """Say a change of state; what flickers is held back by the limiter, with its count."""
        words = f'{command.state.value}: {command.reason.value}'
        text = f'{words}: {command.detail}' if command.detail else words
        said = self._node.limiter.passed(f'state {words}', text)
        error = self._node.controller.error
        if error is not None:
            trace = traceback.format_exception(type(error), error, error.__traceback__)
            self._node.tell(ERROR, ''.join(trace))
        if said is not None:
            self._node.tell(_LEVELS.get(command.state, OK), said)

    def _publish_state(self, command: Command) -> None:
        self._state.publish(status(
            f'{self._node.get_name()}: state', level=_LEVELS.get(command.state, OK),
            text=command.state.value, hardware_id=self._node.get_fully_qualified_name(),
            values={'reason': command.reason.value, 'detail': command.detail, **command.figures,
                    **self._identity()}))

    def _publish_scalars(self, command: Command) -> None:
        for name, publisher in self._scalars.items():
            if name in command.figures:
                publisher.publish(Float64(data=float(command.figures[name])))

    def _diagnose(self, command: Command, *, on_change_only: bool) -> None:
        now = time.monotonic_ns()
        clock_fault = '' if on_change_only else self._node.clock_fault()
        if clock_fault:
            self._node.warn_seldom('clock', clock_fault)
        level = max(_LEVELS.get(command.state, OK), WARN if clock_fault else OK)
        text = f'{command.state.value}: {command.reason.value}'
        dropped = {f'dropped_{reason.value}': count
                   for reason, count in dict(self._node.controller.dropped).items()}
        self._diagnostics.say(level, clock_fault or text, {
            'state': command.state.value, 'reason': command.reason.value, 'detail': command.detail,
            **command.figures, **{f'features_{key}': value for key, value in
                                  self._views.figures(now).items()},
            **self._late.figures(), **self._work.figures(), 'overruns': self._overruns,
            'saturated_share': self._scaled / max(self._moving, 1), **dropped,
            'clock': 'simulated' if self._node.get_clock().ros_time_is_active else 'system',
            'command_listeners': self._command.get_subscription_count(), **self._identity()},
            on_change_only=on_change_only)

    def _identity(self) -> dict[str, str]:
        return {**versions(), 'parameters': parameter_hash(self._node.parameters.values())}
