# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What the controller costs, as ratios measured in one run.

`command_over_lstsq`: a live loop at 100 Hz with views of 50 points at 33/s, everything included
(judging views, weights, prediction, law, gate), against the bare `numpy.linalg.lstsq` on the stack
the law inverts. Each tick runs both, one after the other, so that both see the same machine. The
medians of the ticks with a fresh view and of those without are weighted as they occur.

`batch_over_single`: starts stepped together against one at a time, through the same law, caps and
motion, in steps per second.

`blocks_grown`: memory blocks that a long run of the live loop leaves behind.
"""

from __future__ import annotations

import gc
import sys
import time
from dataclasses import dataclass

import numpy as np

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control import caps, interaction, law, pose
from servo_nodes.control.controller import Controller
from servo_nodes.control.settings import ControllerSettings
from servo_nodes.offline import battery
from servo_nodes.values import SECOND_NS, Floats, State, View

POINTS, RUNS, TICKS, TICKS_PER_VIEW = 50, 12, 150, 3
STARTS, STEPS, SINGLES = 10_000, 300, 12
LONG_TICKS = 100_000
TICK_NS, AGE_NS = SECOND_NS // 100, 30 * SECOND_NS // 1000
STEP, LINEAR, ANGULAR = 0.04, 0.10, 0.5
NOISE_PX, DISTANCE = 0.05, 0.42
CAMERA = Camera(640, 480, 500.0, 500.0, 320.0, 240.0)


@dataclass(frozen=True)
class Costs:
    """Medians, s: of a command with a fresh view, of one without, and of the bare reference."""

    fresh: float
    between: float
    reference: float

    @property
    def ratio(self) -> float:
        """Return the mean cost of a command over that of the reference."""
        mean = (self.fresh + (TICKS_PER_VIEW - 1) * self.between) / TICKS_PER_VIEW
        return mean / self.reference


def command_costs(rng: np.random.Generator, runs: int = RUNS) -> Costs:
    """Return what commands cost while the loop converges from random starts."""
    spent: dict[str, list[int]] = {'fresh': [], 'between': [], 'reference': []}
    for _ in range(runs):
        _converge(rng, spent)
    return Costs(*(1e-9 * float(np.median(spent[name]))
                   for name in ('fresh', 'between', 'reference')))


def _converge(rng: np.random.Generator, spent: dict[str, list[int]]) -> None:
    """Run the loop from one start and note what each tick costs, ns."""
    points_G = np.append(rng.uniform(-0.12, 0.12, (POINTS, 2)), np.full((POINTS, 1), DISTANCE), 1)
    T_CG = motion.exp(rng.uniform(-1, 1, 6) * (0.05, 0.05, 0.05, 0.1, 0.1, 0.3))
    controller = Controller(ControllerSettings())
    controller.calibrate(CAMERA)
    now, view = SECOND_NS, _view(T_CG, points_G, 0, rng)
    for k in range(-TICKS_PER_VIEW, TICKS):
        now += TICK_NS
        fresh = k % TICKS_PER_VIEW == 0
        if fresh:
            view = _view(T_CG, points_G, now - AGE_NS, rng)
            controller.observe(view)
        if k == 0:
            answer = controller.engage(True)
            if not answer.ok:
                raise RuntimeError(f'bench: expected the loop to engage, got: {answer.text}')
        start = time.perf_counter_ns()
        command = controller.command(now)
        middle = time.perf_counter_ns()
        stack = 0.5 * (interaction.points(view.points_xy, view.depths)
                       + interaction.points(view.goal_xy, view.goal_depths))
        error = (view.points_xy - view.goal_xy).ravel()
        before = time.perf_counter_ns()
        np.linalg.lstsq(stack, error, rcond=None)
        end = time.perf_counter_ns()
        if k >= 0 and command.state is State.SERVOING:
            spent['fresh' if fresh else 'between'].append(middle - start)
            spent['reference'].append(end - before)
        T_CG = motion.exp(-command.twist.vector * (TICK_NS / SECOND_NS)) @ T_CG


def blocks_grown(rng: np.random.Generator, ticks: int = LONG_TICKS) -> int:
    """Return how many more blocks of memory Python holds after `ticks` than after a fifth of them.

    By a fifth of the way every bounded history is full.
    """
    controller = Controller(ControllerSettings())
    controller.calibrate(CAMERA)
    points_G = np.append(rng.uniform(-0.12, 0.12, (POINTS, 2)), np.full((POINTS, 1), DISTANCE), 1)
    T_CG, held = motion.exp((0.002, -0.001, 0.003, 0.002, 0.001, 0.005)), 0
    for k in range(ticks):
        now = SECOND_NS + k * TICK_NS
        if k % TICKS_PER_VIEW == 0:
            controller.observe(_view(T_CG, points_G, now - AGE_NS, rng))
        if k == TICKS_PER_VIEW:
            controller.engage(True)
        controller.command(now)
        if k == ticks // 5:
            gc.collect()
            held = sys.getallocatedblocks()
    gc.collect()
    return sys.getallocatedblocks() - held


def _view(T_CG: Floats, points_G: Floats, stamp: int, rng: np.random.Generator) -> View:
    xy, depths = pose.image(T_CG, points_G)
    xy = xy + rng.normal(0.0, NOISE_PX / CAMERA.fx, xy.shape)
    goal_xy, goal_depths = pose.image(np.eye(4), points_G)
    return View(stamp, CAMERA.frame_id, xy, goal_xy, depths, goal_depths, np.ones(POINTS),
                np.arange(POINTS, dtype=np.uint32))


def flown(starts: Floats, steps: int = STEPS) -> Floats:
    """Return where the point law takes the square from poses (..., 4, 4), caps included."""
    settings = law.LawSettings()
    corners = battery.square()
    goal_xy, goal_depths = pose.image(battery.home(), corners)
    for _ in range(steps):
        xy, depths = pose.image(starts, corners)
        wanted = law.twists(xy, goal_xy, depths, goal_depths, settings)
        sent = caps.scaled(wanted, linear=LINEAR, angular=ANGULAR)
        starts = motion.exp(-STEP * sent) @ starts
    return starts


def batch_over_single(rng: np.random.Generator, starts: int = STARTS, singles: int = SINGLES,
                      steps: int = STEPS) -> float:
    """Return steps per second of starts flown together over those of one at a time."""
    reach = np.array((0.05, 0.05, 0.1, 0.2, 0.2, 0.5))
    many = motion.exp(rng.uniform(-1, 1, (starts, 6)) * reach) @ battery.home()
    flown(many[:64], 2)
    flown(many[0], 2)
    begin = time.perf_counter()
    ends = flown(many, steps)
    together = time.perf_counter() - begin
    begin = time.perf_counter()
    alone = np.array([flown(start, steps) for start in many[:singles]])
    one_by_one = time.perf_counter() - begin
    if not np.allclose(ends[:singles], alone, atol=1e-7):
        raise RuntimeError('bench: expected the same ends together and alone, got others')
    return (one_by_one / singles) / (together / starts)


def measure(seed: int) -> dict[str, float]:
    """Return the figures of the controller; about a minute on one core."""
    rng = np.random.default_rng(seed)
    gc.collect()
    gc.freeze()
    try:
        costs = command_costs(rng)
        ratio = batch_over_single(rng)
        grown = blocks_grown(rng)
    finally:
        gc.unfreeze()
    return {'command_over_lstsq': costs.ratio,
            'fresh_command_over_lstsq': costs.fresh / costs.reference,
            'batch_over_single': ratio, 'blocks_grown': float(grown)}
