# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The loop without a clock: feeds the cores from a sequence of timed events, the same every time.

Events come in order of time; what happens between two of them are the controller's ticks, which
follow an event of the same time. The ticks keep the period of the settings, unless the events
bring ticks of their own (those of a recorded controller): then they come when those came, and the
loop's own fill in only where two in a row are missing.
"""

from __future__ import annotations

import enum
import typing
from collections.abc import Iterable, Iterator
from dataclasses import replace

from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.tracking.tracker import Status, Tracker, TrackerSettings
from servo_nodes.values import (
    SECOND_NS,
    Answer,
    Calibration,
    Command,
    Image,
    Reason,
    Stamp,
    State,
    View,
)

DEPTH_APART_NS = 50_000_000
LONGEST_SILENCE_NS = 5 * SECOND_NS
_KEPT_VIEWS = 256


class Kind(enum.Enum):
    """What can reach the loop."""

    IMAGE = 'image'
    DEPTH = 'depth'
    CALIBRATION = 'calibration'
    VIEW = 'view'
    REFUSED = 'refused'
    ENGAGE = 'engage'
    RESET = 'reset'
    HALT = 'halt'
    HEARTBEAT = 'heartbeat'
    GRAPH = 'graph'
    JUMP = 'jump'
    SETTINGS = 'settings'
    TICK = 'tick'


class Event(typing.NamedTuple):
    """Something that reaches the loop at `time`, ns.

    Attributes
    ----------
    time : int, ns, when it arrives
    kind : Kind
    value : what the kind asks for: an Image (IMAGE, DEPTH), a Calibration, a View, (Reason, text)
        for REFUSED, bool for ENGAGE and HALT, (listeners, publishers) for GRAPH, TrackerSettings
        or ControllerSettings for SETTINGS, anything for TICK (handed back with the decision)
    stamp : int or None, ns, when the image of an IMAGE or a VIEW was taken, on the axis of `time`;
        None: the value's own stamp is on that axis
    """

    time: Stamp
    kind: Kind
    value: typing.Any = None
    stamp: Stamp | None = None


class Looked(typing.NamedTuple):
    """The tracker looked at an image; `view` carries the image's own stamp."""

    time: Stamp
    image: Image
    view: View
    status: Status


class Handed(typing.NamedTuple):
    """A view reached the controller; its stamp is on the axis of `time`."""

    time: Stamp
    view: View


class Decided(typing.NamedTuple):
    """The controller decided; `given` is the value of the TICK that asked, None for an own one."""

    time: Stamp
    command: Command
    given: typing.Any


class Told(typing.NamedTuple):
    """A core answered a request."""

    time: Stamp
    kind: Kind
    answer: Answer


class Skipped(typing.NamedTuple):
    """Nothing came for so long that the ticks up to `until`, ns, were left out."""

    time: Stamp
    until: Stamp


Outcome = Looked | Handed | Decided | Told | Skipped


class Loop:
    """Feeds a controller, and a tracker when there are images.

    Parameters
    ----------
    controller : Controller
    tracker : Tracker or None; with one, views come from it and not from the events
    paired : bool
        True: what the tracker saw is handed over when the recorded view of the same stamp arrives,
        so that it comes as late as it came. False: at once.
    rectified : bool, the images were rectified before: the camera has no lens
    """

    def __init__(self, controller: Controller, tracker: Tracker | None = None, *,
                 paired: bool = False, rectified: bool = False) -> None:
        self.controller = controller
        self.tracker = tracker
        self._paired = paired and tracker is not None
        self._rectified = rectified
        self._period = round(SECOND_NS / controller.settings.rate)
        self._depth: Image | None = None
        self._looked: dict[Stamp, View] = {}
        self._calibration: Calibration | None = None
        self._wanted = False
        self._due: Stamp | None = None
        self._now: Stamp | None = None

    def run(self, events: Iterable[Event], until: Stamp | None = None) -> Iterator[Outcome]:
        """Yield what the cores make of the events, in order of time.

        After the last event it goes on ticking up to `until`, ns, when that is given.
        Time never goes back: an event that is late counts as arriving now.
        """
        for event in events:
            time = event.time if self._now is None else max(event.time, self._now)
            if self._due is None:
                self._due = time
            yield from self._ticks(time)
            self._now = time
            yield from self._taken(event if event.time == time else event._replace(time=time))
        if until is not None and self._now is not None:
            yield from self._ticks(max(until, self._now) + 1)

    def _ticks(self, time: Stamp) -> Iterator[Outcome]:
        """Tick on the own grid, before `time`."""
        assert self._due is not None
        last = self._due + LONGEST_SILENCE_NS
        while self._due < time:
            if self._due > last:
                yield Skipped(self._due, time)
                self._due = time
                return
            yield from self._tick(self._due, None)
            self._due += self._period

    def _tick(self, time: Stamp, given: typing.Any) -> Iterator[Outcome]:
        if self._wanted and self.controller.state is State.STANDBY:
            yield self._engaged(time)
        yield Decided(time, self.controller.command(time), given)

    def _engaged(self, time: Stamp) -> Told:
        answer = self.controller.engage(True)
        self._wanted = not answer.ok
        return Told(time, Kind.ENGAGE, answer)

    def _taken(self, event: Event) -> Iterator[Outcome]:
        """Hand an event to the core that it is for."""
        time, kind, value, _ = event
        if kind is Kind.TICK:
            yield from self._tick(time, value)
            self._due = time + 2 * self._period
        elif kind is Kind.VIEW:
            yield from self._take_view(event)
        elif kind is Kind.IMAGE:
            yield from self._look(event)
        elif kind is Kind.DEPTH:
            self._depth = value
        elif kind is Kind.CALIBRATION:
            yield from self._calibrate(time, value)
        elif kind is Kind.ENGAGE:
            self._wanted = False
            yield self._engaged(time) if value else Told(time, kind, self.controller.engage(False))
        elif kind is Kind.RESET:
            if self.controller.state is State.FAULTED:
                yield Told(time, kind, self.controller.reset())
        elif kind is Kind.SETTINGS:
            yield from self._adopt(time, value)
        else:
            self._note(kind, time, value)

    def _note(self, kind: Kind, time: Stamp, value: typing.Any) -> None:
        controller = self.controller
        if kind is Kind.HALT:
            controller.halt(bool(value))
        elif kind is Kind.HEARTBEAT:
            controller.heartbeat(time)
        elif kind is Kind.REFUSED:
            controller.refuse(*value)
        elif kind is Kind.GRAPH:
            controller.graph(*value)
        elif kind is Kind.JUMP:
            controller.jump()

    def _take_view(self, event: Event) -> Iterator[Outcome]:
        view: View | None = event.value
        if self._paired:
            view = self._looked.pop(event.value.stamp, None)
        elif self.tracker is not None:
            return
        if view is not None:
            yield self._handed(event.time, view, event.stamp)

    def _handed(self, time: Stamp, view: View, stamp: Stamp | None) -> Handed:
        if stamp is not None and stamp != view.stamp:
            view = replace(view, stamp=stamp)
        self.controller.observe(view, time)
        return Handed(time, view)

    def _look(self, event: Event) -> Iterator[Outcome]:
        if self.tracker is None:
            return
        image: Image = event.value
        depth = self._depth
        if depth is not None and abs(depth.stamp - image.stamp) > DEPTH_APART_NS:
            depth = None
        view = self.tracker.look(image, depth)
        yield Looked(event.time, image, view, self.tracker.status)
        if not self._paired:
            yield self._handed(event.time, view, event.stamp)
            return
        self._looked[image.stamp] = view
        if len(self._looked) > _KEPT_VIEWS:
            del self._looked[next(iter(self._looked))]

    def _calibrate(self, time: Stamp, calibration: Calibration) -> Iterator[Outcome]:
        """Hand on a calibration that is new, as both shells do."""
        if calibration == self._calibration:
            return
        self._calibration = calibration
        if self.tracker is not None:
            yield Told(time, Kind.CALIBRATION, self.tracker.calibrate(calibration))
        try:
            camera = Camera.from_calibration(calibration, rectified=self._rectified)
        except ValueError as error:
            text = f'camera_info: {error}'
            self.controller.refuse(Reason.NO_CAMERA, text)
            yield Told(time, Kind.CALIBRATION, Answer(False, text))
            return
        self.controller.calibrate(camera)

    def _adopt(self, time: Stamp, settings: typing.Any) -> Iterator[Outcome]:
        if isinstance(settings, ControllerSettings):
            yield Told(time, Kind.SETTINGS, self.controller.adopt(settings))
        elif isinstance(settings, TrackerSettings) and self.tracker is not None:
            yield Told(time, Kind.SETTINGS, self.tracker.adopt(settings))
