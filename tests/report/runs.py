# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A run to report on: half a second of standby, a stop in the middle, home at the end."""

from __future__ import annotations

import cv2
import numpy as np

from servo_nodes.report.record import Event, Picture, Record, Recorder, Verdict

MS = 1_000_000
SECOND = 1000 * MS
ORIGIN = 1000 * SECOND
LAST_HEARD, HELD, STILL, RELEASED = (ORIGIN + ms * MS for ms in (1980, 2100, 2170, 3000))
SERIES = (('error', 'px', 'error'), ('points', '1', 'seen'), ('condition', '1', 'condition'),
          ('twist', 'm/s, rad/s', 'vx', 'vy', 'vz', 'wx', 'wy', 'wz'),
          ('caps', 'm/s, rad/s', 'linear', 'angular'),
          ('latency', 'ms', 'image to features', 'features to command'),
          ('offset', 'm, rad', 'x', 'y', 'z', 'rx', 'ry', 'rz'))


def picture(name: str, stamp: int, caption: str) -> Picture:
    """Return a small picture of nothing in particular."""
    pixels = np.random.default_rng(stamp % 97).integers(0, 255, (48, 64), np.uint8)
    return Picture(name, stamp, caption, cv2.imencode('.png', pixels)[1].tobytes())


def recorder_of_a_run() -> Recorder:
    """Return the recorder of a run of 6 s; points fall silent at `LAST_HEARD`."""
    recorder = Recorder('A run')
    for series in SERIES:
        recorder.declare(*series)
    offset = np.array([0.05, -0.04, -0.10, 0.1, -0.09, 0.35])
    goals = np.random.default_rng(5).uniform((60, 40), (580, 440), (50, 2))
    for tick in range(600):
        now = ORIGIN + 10 * tick * MS
        moving = now >= ORIGIN + SECOND // 2 and not HELD <= now < RELEASED
        twist = -1.2 * offset if moving else np.zeros(6)
        if HELD <= now < STILL:
            twist = -0.1 * offset
        offset = offset + 0.01 * twist
        recorder.note('twist', now, *twist)
        recorder.note('offset', now, *offset)
        heard = now <= LAST_HEARD or now >= RELEASED - 100 * MS
        if tick % 3 == 0 and heard:
            size = float(np.linalg.norm(offset))
            recorder.note('error', now, 400 * size)
            recorder.note('points', now, 50)
            recorder.note('condition', now, 40 + 10 * size)
            recorder.note('latency', now, 12 + tick % 7, 5 + tick % 4)
            recorder.points(now, np.arange(50), goals + 900 * offset[:2], goals)
    for now in (ORIGIN, ORIGIN + 6 * SECOND):
        recorder.note('caps', now, 0.1, 0.5)
    for event in (Event(ORIGIN, 'standby'), Event(ORIGIN + SECOND // 2, 'servoing'),
                  Event(HELD, 'holding', 'features_silent', 'no features for 0.120 s'),
                  Event(RELEASED, 'servoing'), Event(ORIGIN + 5 * SECOND, 'settled')):
        recorder.turn(event)
    recorder.pictures = [
        picture(name, stamp, caption) for name, stamp, caption in (
            ('goal', ORIGIN, 'as taught'), ('start', ORIGIN + SECOND, 'as it started'),
            ('end', ORIGIN + 6 * SECOND, 'as it ended'),
            ('stop', HELD - 20 * MS, 'just before'), ('stop', HELD + SECOND // 2, 'held'))]
    recorder.image_size = (640, 480)
    recorder.facts = {'Result': {'settled after': '4.5 s'}, 'Run': {'seed': 7, 'quiet': True}}
    return recorder


def record_of_a_run(verdict: Verdict | None = None) -> Record:
    """Return the finished record."""
    return recorder_of_a_run().record(verdict or Verdict(True, 'It came home.', 'In 4.5 s.'))
