# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What can be set about the law; the one definition of names, units, ranges, defaults and help."""

from __future__ import annotations

import functools
from dataclasses import dataclass

from servo_nodes.control.least_squares import Damping
from servo_nodes.control.schedule import LARGEST_RATIO
from servo_nodes.control.weights import ESTIMATORS
from servo_nodes.settings import Checked, group, setting

KINDS = ('points', 'polar', 'partitioned', 'hybrid', 'pose')
STACKED = ('points', 'polar')
INTERACTIONS = ('current', 'goal', 'mean', 'blend')
SOURCES = ('structure', 'homography', 'essential')
SOLVERS = ('free', 'box')
MODES = ('direct', 'planned', 'auto')


@dataclass(frozen=True)
class WeightSettings(Checked):
    """How points that disagree with the rest lose their say."""

    estimator: str = setting(
        'tukey', choices=ESTIMATORS,
        help='tukey ignores a wild point altogether, huber limits its pull, none believes all')
    floor_px: float = setting(
        1.0, unit='px', low=0.01, high=50.0,
        help='disagreement that is never punished; too low and good points are thrown away')


@dataclass(frozen=True)
class DampingSettings(Checked):
    """How the law calms down where the view hardly tells some motion."""

    below: float = setting(
        0.004, low=0.0, high=1.0,
        help='smallest singular value under which damping sets in; higher is calmer and slower')
    largest: float = setting(
        0.01, low=0.0, high=1.0, help='damping factor where the smallest singular value is zero')

    @functools.cached_property
    def factors(self) -> Damping:
        """Return them in the form the fits take."""
        return Damping(self.largest, self.below)


@dataclass(frozen=True)
class PathSettings(Checked):
    """Whether the points are led along a planned path."""

    mode: str = setting(
        'auto', choices=MODES,
        help='direct heads for the goal, planned follows a straight camera path with constant '
             'axis of rotation, auto plans when the roll at the start exceeds path.roll')
    roll: float = setting(
        1.2, unit='rad', low=0.1, high=3.1,
        help='roll about the optical axis beyond which auto plans a path')
    linear: float = setting(0.08, unit='m/s', low=0.001, high=0.25,
                            help='speed along the path; keep it below caps.linear')
    angular: float = setting(0.4, unit='rad/s', low=0.001, high=3.0,
                             help='turn rate along the path; keep it below caps.angular')
    slack_px: float = setting(40.0, unit='px', low=1.0, high=1000.0,
                              help='lag behind the path at which the path waits for the camera')


@dataclass(frozen=True)
class PredictionSettings(Checked):
    """How the time between image and motion is bridged."""

    enabled: bool = setting(
        True, help='move the points through the twists sent since the image was taken')
    delay: float = setting(
        0.02, unit='s', low=0.0, high=0.5,
        help='time from a command to the motion of the arm; too high makes the loop swing')


@dataclass(frozen=True)
class TargetSettings(Checked):
    """Whether the target may move by itself."""

    moves: bool = setting(False, help='follow a target that drifts, instead of lagging behind it')
    index: float = setting(
        0.02, low=1e-4, high=10.0,
        help="Kalata's tracking index: higher follows faster and passes on more noise")


@dataclass(frozen=True)
class DepthSettings(Checked):
    """Where the depth of a point comes from when its view does not say."""

    fallback: float = setting(
        0.5, unit='m', low=0.01, high=100.0,
        help='depth of points whose depth is known neither now nor in the goal')
    observe: bool = setting(
        True, help='estimate depths that nobody gives from how points move with the camera')
    gain: float = setting(
        900.0, unit='1/m^2', low=1.0, high=1e6,
        help='how fast such an estimate follows; too high follows the noise')
    nearest: float = setting(0.05, unit='m', low=0.001, high=10.0,
                             help='least depth that is believed')
    farthest: float = setting(20.0, unit='m', low=0.1, high=1000.0,
                              help='largest depth that is believed')

    def check_together(self) -> None:
        """Refuse an empty range."""
        if not self.nearest < self.farthest:
            raise ValueError(f'nearest: expected less than farthest = {self.farthest:g} m, '
                             f'got {self.nearest:g} m')


@dataclass(frozen=True)
class LawSettings(Checked):
    """How views become a raw twist."""

    kind: str = setting(
        'points', choices=KINDS, help='which published law turns features into a twist')
    interaction: str = setting(
        'mean', choices=INTERACTIONS,
        help='interaction matrix of the laws points and polar: at the current points, at the '
             'goal, the mean of both matrices, or the blend (mean) of both pseudo-inverses')
    source: str = setting(
        'structure', choices=SOURCES,
        help='what the laws hybrid and pose take the relative pose from: points and depths of '
             'the goal, a homography (flat targets) or an essential matrix (targets in relief)')
    gain: float = setting(
        1.5, unit='1/s', low=0.01, high=20.0,
        help='share of a large error removed per second; too high swings, too low crawls')
    gain_boost: float = setting(
        1.6, low=1.0, high=LARGEST_RATIO,
        help='how many times the gain a small error gets; too high and the arm trembles at the '
             'goal')
    gain_knee: float = setting(
        20.0, unit='px', low=0.1, high=1000.0, help='error at which the gain is half-way between')
    start_rate: float = setting(
        5.0, unit='1/s', low=0.5, high=200.0,
        help='how fast the law is faded in after engaging; low starts gently')
    mask: tuple[float, ...] = setting(
        (1.0,) * 6, low=0.0, high=1.0, lengths=(6,),
        help='axes of the camera (vx vy vz wx wy wz) the arm can move: 1 moves, 0 does not')
    solver: str = setting(
        'free', choices=SOLVERS,
        help='free: least squares, scaled by the caps; box: least squares within box_linear and '
             'box_angular on each axis')
    box_linear: float = setting(0.05, unit='m/s', low=0.001, high=0.25,
                                help='limit of each linear axis with the solver box')
    box_angular: float = setting(0.3, unit='rad/s', low=0.001, high=3.0,
                                 help='limit of each angular axis with the solver box')
    weights: WeightSettings = group(WeightSettings)
    damping: DampingSettings = group(DampingSettings)
    path: PathSettings = group(PathSettings)
    prediction: PredictionSettings = group(PredictionSettings)
    target: TargetSettings = group(TargetSettings)
    depth: DepthSettings = group(DepthSettings)

    def check_together(self) -> None:
        """Refuse what the chosen law cannot do."""
        if any(axis not in (0.0, 1.0) for axis in self.mask) or not any(self.mask):
            raise ValueError(f'mask: expected six numbers 0 or 1, at least one 1, got {self.mask}')
        if self.kind not in STACKED and (self.solver != 'free' or not all(self.mask)):
            raise ValueError('solver, mask: expected free and six ones with kind '
                             f'{self.kind!r} (only points and polar can leave axes out or bound '
                             f'them), got {self.solver!r} and {self.mask}')

    @functools.cached_property
    def axes(self) -> tuple[int, ...]:
        """Return the numbers of the axes that move."""
        return tuple(axis for axis, moves in enumerate(self.mask) if moves)
