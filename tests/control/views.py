# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Views and situations that the tests of gate and controller are built from."""

from __future__ import annotations

import numpy as np

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control.controller import Controller
from servo_nodes.control.servo import Solution
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.control.situation import Situation
from servo_nodes.settings import settings_from_mapping
from servo_nodes.values import Reason, View

MS = 1_000_000
TICK = 10 * MS
START = 1_000 * MS
CAMERA = Camera(640, 480, 600.0, 600.0, 319.5, 239.5)
OTHER_CAMERA = Camera(640, 480, 500.0, 500.0, 319.5, 239.5)
DISTANCE = 0.42
AWAY = (0.03, -0.02)


def settings(**values):
    """Return controller settings with dotted names given as `group__name`."""
    return settings_from_mapping(
        ControllerSettings, {name.replace('__', '.'): value for name, value in values.items()})


def situation(**values):
    """Return a situation in which nothing is wrong but what is named; settings may be, too."""
    known = settings(**{name: values.pop(name) for name in list(values) if '__' in name})
    return Situation(known.watchdog, known.heartbeat, known.output)._replace(**values)


def view(stamp, *, count=12, shift=AWAY, seed=1, noise=1e-5, frame_id=None, **changes):
    """Return a view whose points are off by `shift`, with noise that differs for each stamp."""
    rng = np.random.default_rng([seed, abs(stamp)])
    goal = np.random.default_rng(seed).uniform(-0.3, 0.3, (count, 2))
    parts = {'points_xy': goal + shift + noise * rng.normal(size=goal.shape), 'goal_xy': goal,
             'depths': np.full(count, DISTANCE), 'goal_depths': np.full(count, DISTANCE),
             'weights': np.ones(count), 'ids': np.arange(count), **changes}
    return View(stamp, CAMERA.frame_id if frame_id is None else frame_id, **parts)


class Asking:
    """A servo that asks for what the test tells it to; the real one's interface."""

    def __init__(self, twist=(0.2, 0.0, 0.0, 0.0, 0.0, 0.0), error_px=40.0, **changes):
        self.settings = None
        self.twist, self.error_px, self.changes = twist, error_px, changes
        self.raises = None
        self.solved = []
        self.began, self.recorded, self.seen, self.rests = [], [], [], 0

    def calibrate(self, camera):
        self.camera = camera

    def reset(self):
        self.seen.clear()

    def begin(self, now):
        self.began.append(now)

    def rest(self):
        self.rests += 1

    def observe(self, view):
        self.seen.append(view)

    def record(self, twist, now):
        self.recorded.append((now, np.array(twist)))

    def solve(self, now):
        self.solved.append(now)
        if self.raises is not None:
            raise self.raises
        if not self.seen:
            return None
        last = self.seen[-1]
        parts = {'twist': np.array(self.twist, dtype=float), 'error_px': self.error_px,
                 'condition': 10.0, 'smallest': 0.5, 'points': len(last),
                 'scatter': np.zeros(6), 'points_xy': last.points_xy, 'view_stamp': last.stamp,
                 'gain': 1.0, **self.changes}
        return Solution(**parts)


class Loop:
    """A controller that is ticked and fed by hand, on its own clock."""

    def __init__(self, servo=None, *, camera=CAMERA, period=3, **values):
        self.servo = Asking() if servo is None else servo
        self.controller = Controller(settings(**values), servo=self.servo)
        if camera is not None:
            self.controller.calibrate(camera)
        self.now = START
        self.period = period
        self.count = 0
        self.shift = AWAY
        self.commands = []

    def tick(self, ticks=1, *, feed=True, latency=20 * MS, **changes):
        """Advance by ticks, with a good view every `period` of them; return the last command."""
        for _ in range(ticks):
            self.now += TICK
            if feed and self.count % self.period == 0:
                seen = view(self.now - latency, **{'shift': self.shift, **changes})
                self.controller.observe(seen, self.now)
            self.count += 1
            self.commands.append(self.controller.command(self.now))
        return self.commands[-1]

    def at_home(self):
        """Show points that are where the goal has them, and ask for next to nothing."""
        self.shift, self.servo.twist, self.servo.error_px = (0.0, 0.0), (1e-5, 0, 0, 0, 0, 0), 0.3
        return self

    def engaged(self, ticks=30):
        """Engage and let the loop run for a while."""
        self.tick(4)
        answer = self.controller.engage(True)
        assert answer.ok, answer.text
        self.tick(ticks)
        return self

    def until_rest(self, limit=200, **how):
        """Tick until the command is exactly zero; return the seconds it took."""
        for ticks in range(limit):
            if not self.tick(**how).twist.vector.any():
                return (ticks + 1) * TICK / 1e9
        raise AssertionError('the loop never came to rest')


def speed(command):
    """Return linear and angular speed of a command."""
    vector = command.twist.vector
    return float(np.linalg.norm(vector[:3])), float(np.linalg.norm(vector[3:]))


def pose(shift, vector=(0.0, 0.0, 0.0)):
    """Return a rigid motion."""
    return motion.pose_from_parts(motion.rotation_from_vector(np.array(vector, dtype=float)),
                                  np.array(shift, dtype=float))


NONE = Reason.NONE
