# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Keypoints: what two pictures have in common, and which points of a goal are worth following."""

from __future__ import annotations

import typing
from dataclasses import dataclass

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.tracking.pictures import Grey
from servo_nodes.values import Floats

# What the stubs of OpenCV say differs between its releases, and in part is wrong.
_cv: typing.Any = cv2
Index = npt.NDArray[np.intp]
RATIO = 0.8
# Distances at which two descriptors are alike without comparison: bits of 256, and SIFT's L2.
_ALIKE_ORB, _ALIKE_SIFT, _NEIGHBOURS = 48, 200.0, 8
CELLS = (12, 9)


@dataclass(frozen=True, eq=False)
class Keypoints:
    """Described keypoints: `uv` (N, 2) px, `descriptors` (N, D) uint8 (ORB) or float32 (SIFT)."""

    uv: Floats
    descriptors: npt.NDArray[typing.Any]

    def __len__(self) -> int:
        return len(self.uv)


@dataclass(frozen=True, eq=False)
class Matches:
    """Pairs of keypoints: `first`, `second` (M,) indices, best first."""

    first: Index
    second: Index

    def __len__(self) -> int:
        return len(self.first)


class Describer:
    """Finds and describes keypoints; `kind` is `orb` or `sift`."""

    def __init__(self, kind: str, features: int) -> None:
        self._norm = _cv.NORM_HAMMING if kind == 'orb' else _cv.NORM_L2
        self._type = _cv.CV_32S if kind == 'orb' else _cv.CV_32F
        # A low threshold of FAST, so that dark pictures keep corners; the best ones are taken.
        self._detector: typing.Any = (
            _cv.ORB_create(nfeatures=features, fastThreshold=7) if kind == 'orb'
            else _cv.SIFT_create(nfeatures=features, contrastThreshold=0.02))
        self._alike = _ALIKE_ORB if kind == 'orb' else _ALIKE_SIFT
        self._width = 32 if kind == 'orb' else 128

    def describe(self, grey: Grey) -> Keypoints:
        """Return the keypoints of a picture; none is an answer."""
        found, descriptors = self._detector.detectAndCompute(grey, None)
        if descriptors is None or not len(found):
            return Keypoints(np.empty((0, 2)), np.empty(
                (0, self._width), np.uint8 if self._type == _cv.CV_32S else np.float32))
        uv = np.asarray(_cv.KeyPoint_convert(found), dtype=np.float64).reshape(-1, 2)
        return Keypoints(uv, np.asarray(descriptors).reshape(len(uv), -1))

    def match(self, first: Keypoints, second: Keypoints) -> Matches:
        """Return pairs that are each other's best and clearly better than the second best.

        The ratio test is Lowe's (IJCV 60, 2004), which drops what occurs twice.
        """
        none = np.empty(0, np.intp)
        if len(first) < 2 or len(second) < 2:
            return Matches(none, none)
        distance, nearest = _cv.batchDistance(first.descriptors, second.descriptors, self._type,
                                              normType=self._norm, K=2)
        distance, nearest = distance.reshape(-1, 2), nearest.reshape(-1, 2)
        clear = np.flatnonzero(distance[:, 0] < RATIO * distance[:, 1])
        best = nearest[clear, 0]
        # Mutual: of all that chose the same partner only the closest stays.
        order = np.argsort(distance[clear, 0], kind='stable')
        _, earliest = np.unique(best[order], return_index=True)
        kept = order[np.sort(earliest)]
        return Matches(clear[kept], best[kept].astype(np.intp))


    def match_elsewhere(self, keypoints: Keypoints, apart_px: float) -> tuple[Index, Index]:
        """Return pairs (M,), (M,) of keypoints of one picture, alike but `apart_px` apart."""
        none = np.empty(0, np.intp)
        if len(keypoints) <= _NEIGHBOURS:
            return none, none
        distance, nearest = _cv.batchDistance(
            keypoints.descriptors, keypoints.descriptors, self._type, normType=self._norm,
            K=_NEIGHBOURS)
        gap = np.linalg.norm(keypoints.uv[nearest] - keypoints.uv[:, None], axis=-1)
        away = gap > apart_px
        choice = np.argmax(away, axis=1)
        line = np.arange(len(keypoints))
        alike = away[line, choice] & (distance[line, choice] < self._alike)
        first = np.flatnonzero(alike)
        return first, nearest[first, choice[first]].astype(np.intp)


def strong_points(grey: Grey, count: int, margin: int) -> Floats:
    """Return up to `count` corners (N, 2), px, whole numbers, spread over the picture.

    Corners are Shi & Tomasi's (CVPR 1994). Each cell of a coarse grid gives its best before any
    gives its second, so that a crowded part does not take all.
    """
    height, width = grey.shape
    if min(height, width) <= 2 * margin + 2:
        return np.empty((0, 2))
    mask = np.zeros_like(grey)
    mask[margin:height - margin, margin:width - margin] = 255
    gap = max(4.0, 0.45 * float(np.sqrt(height * width / count)))
    found: typing.Any = _cv.goodFeaturesToTrack(
        grey, 6 * count, 0.005, gap, mask=mask, blockSize=7)
    if found is None:
        return np.empty((0, 2))
    uv = np.rint(np.asarray(found, dtype=np.float64).reshape(-1, 2))
    column = (uv[:, 0] * CELLS[0] / width).astype(int)
    row = (uv[:, 1] * CELLS[1] / height).astype(int)
    rank = _rank_in_group(row * CELLS[0] + column)
    return typing.cast(Floats, uv[np.argsort(rank, kind='stable')[:count]])


def _rank_in_group(group: Index) -> Index:
    """Return for each member how many of its group come before it."""
    order = np.argsort(group, kind='stable')
    ordered = group[order]
    start = np.r_[0, np.flatnonzero(np.diff(ordered)) + 1]
    lengths = np.diff(np.r_[start, len(group)])
    rank = np.empty(len(group), np.intp)
    rank[order] = np.arange(len(group)) - np.repeat(start, lengths)
    return rank
