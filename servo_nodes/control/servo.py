# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""From views to the raw twist, with the memory that needs.

`observe` stores a view, `record` what was really sent, `solve` answers for a moment: where the
points are by then, how far each is trusted, whether a path leads them, and the twist of the law.
No clock is read.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from servo_nodes import motion
from servo_nodes.camera import Camera
from servo_nodes.control import interaction, law, least_squares, normal, prediction, weights
from servo_nodes.control.guide import Guide, Lead
from servo_nodes.control.law_settings import LawSettings
from servo_nodes.control.schedule import SmoothStart, gain_at
from servo_nodes.control.sight import DepthMemory, Ids, Sight, sight_from_view
from servo_nodes.control.target import Drift
from servo_nodes.values import SECOND_NS, Floats, Stamp, View


@dataclass(frozen=True, eq=False)
class Solution:
    """What the law asks for now, and what it rests on.

    Attributes
    ----------
    twist : (6,), raw twist of the camera in its optical frame, before the gate
    error_px : float, px, root mean square distance of the points to the goal, weighted by w^2
    condition, smallest : float, of the weighted interaction matrix, before the loop is begun that
        of the view itself; inf and 0 without full rank
    points : int, number of points with weight
    scatter : (6,), m and rad, standard deviation of the camera pose for 1 px of noise in a
        coordinate, when the view was first used
    points_xy : (N, 2), normalised, the points the twist was computed at (predicted to now)
    view_stamp : int, ns, stamp of the view it rests on
    gain : float, 1/s, in force
    left : float, share of a planned path still to go; 0 without a path
    refusal : str, why the law must not run from here; empty when it may. The twist is zero then
    """

    twist: Floats
    error_px: float
    condition: float
    smallest: float
    points: int
    scatter: Floats
    points_xy: Floats
    view_stamp: Stamp
    gain: float = math.nan
    left: float = 0.0
    refusal: str = ''


@dataclass(frozen=True, eq=False)
class _Judged:
    """Weights (N,) of a view's points, their squares and the sum of these."""

    ids: Ids
    factors: Floats
    weights: Floats
    squares: Floats
    total: float
    count: int


class Servo:
    """Turns views into raw twists; keeps the latest view and what it needs to read it.

    Parameters
    ----------
    settings : LawSettings, replaceable through `settings` at any time
    """

    def __init__(self, settings: LawSettings) -> None:
        self.settings = settings
        self._focal_px = math.nan
        self._sight: Sight | None = None
        self._judged: _Judged | None = None
        self._before: _Judged | None = None
        self._scatter: Floats | None = None
        self._odometer = prediction.Odometer()
        self._depths = DepthMemory()
        self._drift = Drift()
        self._start = SmoothStart()
        self._guide = Guide()

    def calibrate(self, camera: Camera) -> None:
        """Take the camera that the views are measured with."""
        self._focal_px = math.sqrt(camera.fx * camera.fy)

    def reset(self) -> None:
        """Forget views and motion; the calibration stays."""
        self._sight = self._judged = self._before = None
        self._odometer.clear()
        self._depths.clear()
        self._drift.clear()
        self._start.forget()
        self._guide.clear()

    def begin(self, now: Stamp) -> None:
        """Start from rest: the loop was engaged at `now`, ns."""
        self._odometer.clear()
        self._drift.clear()
        self._start.begin(now)
        self._guide.begin()

    def rest(self) -> None:
        """Take the loop as off: judge every view as a start, until `begin`."""
        self._start.forget()
        self._guide.clear()

    def record(self, twist: Floats, now: Stamp) -> None:
        """Take note that `twist` (6,), in the optical frame, was really sent at `now`, ns."""
        self._odometer.record(twist, now)

    def observe(self, view: View) -> None:
        """Keep `view` as the latest one; learn from how its points moved since the one before."""
        before, settings = self._sight, self.settings
        if before is not None and 0 < view.stamp - before.stamp < SECOND_NS:
            if settings.depth.observe and not (view.depths > 0).all():
                self._learn_depths(before, view)
        sight = sight_from_view(view, settings.depth, self._depths, before)
        if settings.target.moves and before is not None and len(sight):
            self._learn_drift(before, sight)
        self._sight, self._before = sight, self._judged
        self._judged = self._scatter = None

    def _passage(self, start: Stamp, end: Stamp) -> Floats | None:
        """Return the way from the frame of an image at `start` to that of one at `end`, (4, 4)."""
        lag = round(self.settings.prediction.delay * SECOND_NS)
        return self._odometer.passage(start - lag, end - lag)

    def _learn_depths(self, before: Sight, view: View) -> None:
        passage = self._passage(before.stamp, view.stamp)
        duration = (view.stamp - before.stamp) / SECOND_NS
        twist = np.zeros(6) if passage is None else -motion.log(passage) / duration
        finite = np.isfinite(view.points_xy).all(-1)
        self._depths.follow(before, view.points_xy[finite], view.ids[finite], twist, duration,
                            self.settings.depth)

    def _learn_drift(self, before: Sight, sight: Sight) -> None:
        duration = (sight.stamp - before.stamp) / SECOND_NS
        _, i, j = np.intersect1d(before.ids, sight.ids, return_indices=True)
        if len(i) < 3 or not 0 < duration < 1:
            return
        passage, rays = self._passage(before.stamp, sight.stamp), before.rays[:, i]
        expected, inverse = rays[:2], rays[3]
        if passage is not None:
            expected, inverse = prediction.moved(rays, passage)
        stack = interaction.points(expected.T, 1 / inverse)
        rest = (expected.T - sight.xy[j]).reshape(-1)
        self._drift.update(least_squares.fit(stack, rest).x, duration,
                           index=self.settings.target.index)

    def _predicted(self, sight: Sight, now: Stamp) -> tuple[Floats, Floats]:
        """Return points (2, N) and 1/Z (N,), 1/m, where they will be when a decision acts."""
        settings, passage = self.settings, None
        if settings.prediction.enabled:
            lag = round(settings.prediction.delay * SECOND_NS)
            passage = self._odometer.passage(sight.stamp - lag, now)
            if settings.target.moves:
                ahead = (now - sight.stamp + lag) / SECOND_NS
                drifted = prediction.rigid(self._drift.twist.tolist(), ahead)
                passage = drifted if passage is None else drifted @ passage
        if passage is None:
            return sight.rays[:2], sight.rays[3]
        return prediction.moved(sight.rays, passage)

    def solve(self, now: Stamp) -> Solution | None:
        """Return what the law asks for at `now`, ns; None without a camera or a usable point."""
        sight, settings = self._sight, self.settings
        if sight is None or math.isnan(self._focal_px) or not len(sight):
            return None
        xy, inverse = self._predicted(sight, now)
        lead = self._guide.lead(xy, inverse, sight, now, settings, self._focal_px)
        here = normal.basis(xy, inverse, lead.goal_xy)
        there = lead.basis
        mean = normal.mean_basis(here, there)
        judged = self._judged or self._judge(mean, sight)
        chosen = self._chosen(here, there, mean)
        system = normal.system(chosen, judged.squares)
        square = float(system[6, 6])
        if lead.twist is not None:
            square = _squared_error(xy, sight, judged.squares)
        error_px = self._focal_px * math.sqrt(max(square, 0.0) / judged.total)
        gain = gain_at(error_px, settings)
        fit = self._fit(system, chosen, judged)
        if settings.kind == 'points' and settings.solver == 'free':
            twist = -gain * self._unit_twist(fit, here, there, judged)
        else:
            twist = law.twists(xy.T, lead.goal_xy.T, 1 / inverse, 1 / lead.goal_inverse, settings,
                               weights=judged.weights, gain=gain)
        if chosen is not here and self._guide.is_idle:
            # The mean matrix of a far roll may lack rank where the view, led by a path, does not.
            fit = self._fit(normal.system(here, judged.squares), here, judged)
        if self._scatter is None:
            self._scatter = _spread(fit.scatter, settings.axes) / self._focal_px
        smallest = float(fit.values[0])
        condition = float(fit.values[-1]) / smallest if smallest > 0 else math.inf
        return Solution(self._shaped(twist, lead, now), error_px, condition, smallest,
                        judged.count, self._scatter,
                        xy.T, sight.stamp, gain, lead.left, lead.refusal)

    def _chosen(self, here: Floats, there: Floats, mean: Floats) -> Floats:
        """Return the basis (10, N) that the choice of interaction inverts (first)."""
        choice = self.settings.interaction
        if self.settings.kind != 'points':
            return here
        if choice == 'goal':
            return _with_error_of(there, here)
        return mean if choice == 'mean' else here

    def _fit(self, system: Floats, basis: Floats, judged: _Judged) -> least_squares.Fit:
        """Return the fit of the axes that move; through the rows where the system is too poor."""
        axes, damping = self.settings.axes, self.settings.damping.factors
        if len(axes) < 6:
            system = system[np.ix_((*axes, 6), (*axes, 6))]
        fit = least_squares.fit_normal(system[:-1, :-1], system[:-1, -1], damping)
        if fit is None:
            rows, error = normal.stack(basis)
            scale = np.repeat(judged.weights, 2)
            fit = least_squares.fit_by_singular_values(
                rows[:, axes] * scale[:, None], error * scale, damping)
        return fit

    def _unit_twist(self, fit: least_squares.Fit, here: Floats, there: Floats,
                    judged: _Judged) -> Floats:
        """Return M e (6,), zero on the axes that do not move."""
        part = fit.x
        if self.settings.interaction == 'blend':
            basis = _with_error_of(there, here)
            other = self._fit(normal.system(basis, judged.squares), basis, judged)
            part = 0.5 * (part + other.x)
        return _spread(part, self.settings.axes)

    def _judge(self, mean: Floats, sight: Sight) -> _Judged:
        """Weigh the points of a new view, starting from their weights in the view before."""
        settings, before = self.settings.weights, self._before
        known = before is not None and before.ids.tobytes() == sight.ids.tobytes()
        factors = weights.of_points(
            mean, sight.trust, estimator=settings.estimator,
            floor=settings.floor_px / self._focal_px,
            before=before.factors if before is not None and known else None)
        trust = sight.trust * factors
        squares = trust * trust
        self._judged = _Judged(sight.ids, factors, trust, squares, float(np.add.reduce(squares)),
                               int(np.count_nonzero(trust)))
        return self._judged

    def _shaped(self, twist: Floats, lead: Lead, now: Stamp) -> Floats:
        """Return the twist with path and target added, faded in after the start."""
        if lead.refusal:
            return np.zeros(6)
        if lead.twist is not None:
            twist = twist + lead.twist
        if self.settings.target.moves:
            twist = twist + self._drift.twist
        return self._start.applied(twist, now, self.settings.start_rate)


def _with_error_of(basis: Floats, other: Floats) -> Floats:
    mixed: Floats = basis.copy()
    mixed[normal.EX:] = other[normal.EX:]
    return mixed


def _squared_error(xy: Floats, sight: Sight, squares: Floats) -> float:
    away = xy - sight.goal.xy
    return float(squares @ (away * away).sum(0))


def _spread(part: Floats, axes: tuple[int, ...]) -> Floats:
    if len(axes) == 6:
        return part
    whole = np.zeros(6)
    whole[list(axes)] = part
    return whole
