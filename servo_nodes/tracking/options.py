# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What of the tracker can be set: the one definition, in groups with dotted names."""

from __future__ import annotations

from dataclasses import dataclass

from servo_nodes.settings import Checked, group, setting

DICTIONARIES = ('4x4_50', '4x4_100', '4x4_250', '4x4_1000', '5x5_50', '5x5_100', '5x5_250',
                '5x5_1000', '6x6_50', '6x6_100', '6x6_250', '6x6_1000', '7x7_50', '7x7_100',
                '7x7_250', '7x7_1000', 'apriltag_16h5', 'apriltag_25h9', 'apriltag_36h10',
                'apriltag_36h11')


@dataclass(frozen=True)
class GoalOptions(Checked):
    """Where the goal lives."""

    folder: str = setting('', help='Folder of the goal view: read at the start when it is there, '
                          'written by teach. Empty: nothing is read, teach keeps it in memory.')


@dataclass(frozen=True)
class TeachOptions(Checked):
    """How a view is taught."""

    distance: float = setting(
        0.5, unit='m', low=0.02, high=50.0,
        help='Distance of the target plane along the optical axis at the goal, used when no depth '
        'image is there. Wrong by a factor: the approach is that factor too fast or too slow.')
    least_points: int = setting(
        30, low=8, high=500, help='Fewer usable points and the view is refused.')
    accept_warnings: bool = setting(
        True, help='Take a view that is usable but poor (the answer says why); false refuses it.')


@dataclass(frozen=True)
class DetectorOptions(Checked):
    """How the goal is found in an image."""

    kind: str = setting('orb', choices=('orb', 'sift', 'marker'),
                        help='orb: fast, for most textures. sift: slower, for hard ones. '
                        'marker: fiducials of the marker group, nothing else.')
    features: int = setting(1000, low=100, high=10000,
                            help='Most keypoints described per image; more finds poorer views and '
                            'costs time while searching, not while following.')
    points: int = setting(120, low=12, high=500, help='Most points followed, spread out.')


@dataclass(frozen=True)
class MarkerOptions(Checked):
    """Which fiducials are looked for when detector.kind is marker."""

    dictionary: str = setting('apriltag_36h11', choices=DICTIONARIES,
                              help='Family the markers were printed from.')
    side: float = setting(0.05, unit='m', low=0.001, high=10.0,
                          help='Length of the black square; depth is in proportion to it.')
    board: tuple[float, ...] = setting(
        (), lengths=(0, 3), low=0.0, high=100.0,
        help='ChArUco board: columns, rows, side of a square in m; empty: single markers.')


@dataclass(frozen=True)
class ConsensusOptions(Checked):
    """When points agree well enough to be believed."""

    threshold_px: float = setting(
        3.0, unit='px', low=0.3, high=20.0,
        help='Distance from the model within which a keypoint agrees while searching.')
    acquire_points: int = setting(
        16, low=8, high=200, help='Points to be verified in an image to take it for the goal.')
    keep_points: int = setting(
        10, low=6, high=200, help='Points below which a goal that was being followed is lost.')


@dataclass(frozen=True)
class FollowOptions(Checked):
    """How points are followed from image to image and held to the goal view."""

    likeness: float = setting(
        0.8, low=0.3, high=0.99,
        help="Least correlation of a point's patch with the goal view; lower keeps points in "
        'blur, and lets half-covered ones pass.')
    residual_px: float = setting(
        1.0, unit='px', low=0.1, high=10.0,
        help='Largest distance of a delivered point from where the others put it.')


@dataclass(frozen=True)
class DepthOptions(Checked):
    """Where the depth of the points comes from."""

    source: str = setting(
        'auto', choices=('auto', 'goal', 'image', 'constant', 'none'),
        help="goal: the taught plane or map through the view's change. image: the depth image. "
        'auto: the image where it knows, else the goal. constant: teach.distance. none: NaN.')


@dataclass(frozen=True)
class ImageOptions(Checked):
    """What the images are."""

    rectified: bool = setting(False, fixed=True, help='The images are already rectified: use P of '
                              'camera_info and no lens distortion.')
    frozen_stops: bool = setting(
        True, help='After half a second of identical pixels under new stamps nothing is seen any '
        'more. Set false only for a camera without noise, which exists in simulation alone.')


@dataclass(frozen=True)
class TrackerSettings(Checked):
    """All settings of the tracker."""

    goal: GoalOptions = group(GoalOptions)
    teach: TeachOptions = group(TeachOptions)
    detector: DetectorOptions = group(DetectorOptions)
    marker: MarkerOptions = group(MarkerOptions)
    consensus: ConsensusOptions = group(ConsensusOptions)
    follow: FollowOptions = group(FollowOptions)
    depth: DepthOptions = group(DepthOptions)
    image: ImageOptions = group(ImageOptions)

    def check_together(self) -> None:
        """Refuse a keep threshold above the acquire threshold: it would never hold anything."""
        if self.consensus.keep_points > self.consensus.acquire_points:
            raise ValueError('consensus.keep_points: expected at most consensus.acquire_points = '
                             f'{self.consensus.acquire_points}, got {self.consensus.keep_points}')
