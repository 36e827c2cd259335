# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The simulator as a node: twists in, images out, in real time or leading the time itself."""

from __future__ import annotations

import sys
import threading
import time
import typing
from collections.abc import Mapping

import numpy as np
from geometry_msgs.msg import TwistStamped
from rosgraph_msgs.msg import Clock as ClockMessage
from std_srvs.srv import Trigger

from servo_nodes import wire
from servo_nodes.ros.diagnostics import OK, Diagnostics, versions
from servo_nodes.ros.meters import Durations
from servo_nodes.ros.options import SimulatorNodeSettings
from servo_nodes.ros.pacer import Pacer
from servo_nodes.ros.pictures import Pictures
from servo_nodes.ros.process import run
from servo_nodes.ros.shell import Shell
from servo_nodes.simulation.simulator import Picture, Simulator, SimulatorSettings
from servo_nodes.values import Stamp

CLOCK_RATE = 200.0
LINE_RATE = 100.0
START = 1_000_000_000


class SimulatorNode(Shell):
    """Moves the simulated camera and publishes what it sees."""

    def __init__(self) -> None:
        super().__init__('simulator', SimulatorSettings, SimulatorNodeSettings)
        self._lock = threading.Lock()

    def configure(self) -> str:
        """Make the core and its doors."""
        shell, doors = self.parameters[SimulatorNodeSettings], self.doors
        self.simulator = Simulator(self.parameters[SimulatorSettings],
                                   np.random.default_rng(shell.seed))
        self.simulator.restart(now=START)
        self._pictures = Pictures(self)
        self._clock_out = doors.publish(ClockMessage, '/clock') if shell.clock.lead else None
        doors.listen(TwistStamped, 'camera_twist', self._take_twist)
        doors.serve(Trigger, '~/restart', self._restart)
        self._diagnostics, self._work = Diagnostics(self, 'simulation'), Durations('exposure')
        return ''

    def activate(self) -> str:
        """Let time run."""
        self._origin = time.monotonic_ns(), self.simulator.now
        rate = self.simulator.settings.camera.rate * self._speed()
        self._pacers = [Pacer(rate, self._expose, self.fail, 'camera'),
                        Pacer(LINE_RATE, self._deliver, self.fail, 'line')]
        if self._clock_out is not None:
            self._pacers.append(Pacer(CLOCK_RATE, self._tell_time, self.fail, 'clock'))
        for pacer in self._pacers:
            pacer.start()
        self._timer = self.every(1.0, self._diagnose)
        return ''

    def deactivate(self) -> str:
        """Let time stand still."""
        for pacer in self._pacers:
            pacer.end()
        self.destroy_timer(self._timer)
        return ''

    def rest(self) -> None:
        """Stop exposing."""
        if self.active:
            self.deactivate()

    def adopt(self, settings: Mapping[type, object]) -> str:
        """Take new settings; the arm stays where it is, `start` waits for the next restart."""
        new = settings.get(SimulatorSettings)
        if self.configured and new is not None:
            with self._lock:
                self.simulator.adopt(typing.cast(SimulatorSettings, new))
            if self.active:
                self._pacers[0].period_ns = round(1e9 / new.camera.rate / self._speed())
        return ''

    def _speed(self) -> float:
        clock = self.parameters[SimulatorNodeSettings].clock
        return clock.speed if clock.lead else 1.0

    def _time(self, steady: Stamp) -> Stamp:
        """Return the simulated time, ns, at a steady one."""
        began, simulated = self._origin
        return simulated + round((steady - began) * self._speed())

    def _expose(self, now: Stamp, late: Stamp) -> None:
        with self._lock:
            self.simulator.advance_to(max(self._time(now), self.simulator.now))
            self.simulator.transmit(self.simulator.expose())
            self._publish(self.simulator.arrivals())
        self._work.add(time.monotonic_ns() - now)

    def _deliver(self, now: Stamp, late: Stamp) -> None:
        """Publish what faults have delayed."""
        due = self.simulator.next_arrival
        if due is not None and due <= self._time(now):
            with self._lock:
                self.simulator.advance_to(max(self._time(now), self.simulator.now))
                self._publish(self.simulator.arrivals())

    def _publish(self, pictures: list[Picture]) -> None:
        lead = self._clock_out is not None
        ahead = 0 if lead else self.now_ns() - self._time(time.monotonic_ns())
        for picture in pictures:
            # A stamp of zero is a fault that must stay one.
            self._pictures.show(picture, picture.stamp + ahead if picture.stamp else 0)

    def _tell_time(self, now: Stamp, late: Stamp) -> None:
        message = ClockMessage()
        wire.fill_time(message.clock, self._time(now))
        self._clock_out.publish(message)

    def _take_twist(self, message: TwistStamped) -> None:
        if not self.active:
            return
        twist = wire.twist_from_message(message)
        try:
            with self._lock:
                self.simulator.apply(twist, self._time(time.monotonic_ns()))
        except ValueError as error:
            self.warn_seldom('twist', f'camera_twist: {error}')

    def _restart(self, request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        with self._lock:
            self.simulator.restart()
        start = self.simulator.settings.start
        response.success = True
        response.message = f'at the start: {start.translation} m, {start.rotation} rad from home'
        return response

    def _diagnose(self) -> None:
        self._diagnostics.say(OK, 'exposing', {'simulated_s': self.simulator.now / 1e9,
                                               **self._work.figures(), **versions()})


def main() -> None:
    """Run the node."""
    sys.exit(run(SimulatorNode))
