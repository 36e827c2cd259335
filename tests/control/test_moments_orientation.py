# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The orientation of a region and of a set of points, and how it changes with the camera.

The rows follow Chaumette 2004 (from memory, re-derived in the module's head). They are checked by
finite differences of exact moments over the exact motion, the third moments by OpenCV.
"""

from __future__ import annotations

import cv2
import numpy as np
import pytest
import scipy.linalg
from hypothesis import assume, given
from hypothesis import strategies as st

from servo_nodes.control import moments

RECTANGLE = np.array([(-0.1, -0.05), (0.1, -0.05), (0.1, 0.05), (-0.1, 0.05)]) / 0.5
TRIANGLE = np.array([(0.05, 0.02), (0.3, 0.1), (0.1, 0.25)]) / 0.8
HOUSE = np.array([(-0.4, -0.1), (0.1, -0.3), (0.3, -0.1), (0.25, 0.2), (-0.1, 0.1)])

coordinate = st.floats(-0.8, 0.8)
twist6 = st.tuples(*[st.floats(-1, 1)] * 6).map(np.array)
corners4 = st.lists(st.tuples(coordinate, coordinate), min_size=4, max_size=4).map(np.array)


def seen_after(points_xy, depth, twist, duration):
    """Return the points (N, 2) at one depth after exact motion, by SciPy's matrix exponential."""
    generator = np.zeros((4, 4))
    generator[:3, :3] = [[0, -twist[5], twist[4]], [twist[5], 0, -twist[3]],
                         [-twist[4], twist[3], 0]]
    generator[:3, 3] = twist[:3]
    passage = scipy.linalg.expm(-generator * duration)
    X = depth * np.column_stack([points_xy, np.ones(len(points_xy))])
    X = X @ passage[:3, :3].T + passage[:3, 3]
    return X[:, :2] / X[:, 2:]


def turning(of_shape, points_xy, depth, twist, duration=1e-5):
    """Return the central difference of the orientation, the short way round."""
    ahead, behind = (of_shape(seen_after(points_xy, depth, twist, way * duration)).orientation
                     for way in (1, -1))
    return (np.remainder(ahead - behind + np.pi / 2, np.pi) - np.pi / 2) / (2 * duration)


@pytest.mark.parametrize('corners, degrees', [(RECTANGLE, 0.0), (TRIANGLE, 3.684025536)])
def test_the_orientation_of_a_region_is_the_published_one(corners, degrees):
    """MOM-A, MOM-B; from either side round, and with any corner first."""
    for order in (corners, corners[::-1], np.roll(corners, 1, axis=0)):
        assert np.degrees(moments.of_polygon(order).orientation) == pytest.approx(degrees,
                                                                                  abs=1e-7)


@pytest.mark.parametrize('corners', [RECTANGLE, TRIANGLE, HOUSE])
def test_the_third_moments_of_a_region_are_opencvs(corners):
    """cv2.moments takes a contour in single precision; central moments over the area."""
    contour = np.ascontiguousarray((1000 * corners).astype(np.float32))[:, None]
    theirs = cv2.moments(contour)
    expected = np.array([theirs[name] for name in ('mu30', 'mu21', 'mu12', 'mu03')])
    np.testing.assert_allclose(moments.thirds_of_polygon(corners), expected / theirs['m00'] / 1e9,
                               rtol=1e-4, atol=1e-9)


def test_the_third_moments_do_not_depend_on_where_a_region_lies_or_which_way_round_it_goes():
    here = moments.thirds_of_polygon(HOUSE)
    np.testing.assert_allclose(moments.thirds_of_polygon(HOUSE[::-1] + (5, -3)), here, atol=1e-13)
    np.testing.assert_allclose(moments.thirds_of_polygon(-HOUSE), -here, atol=1e-15)
    np.testing.assert_allclose(moments.thirds_of_polygon(2 * HOUSE), 8 * here, atol=1e-15)


def test_many_points_all_over_a_region_have_nearly_its_third_moments():
    """Points and regions are two routes to one limit: 400 x 400 cells of a triangle."""
    side = (np.arange(400) + 0.5) / 400
    u, v = (axis.ravel() for axis in np.meshgrid(side, side))
    inside = u + v < 1
    a, b, c = TRIANGLE
    cloud = a + u[inside, None] * (b - a) + v[inside, None] * (c - a)
    np.testing.assert_allclose(moments.thirds_of_points(cloud),
                               moments.thirds_of_polygon(TRIANGLE), atol=2e-6)
    doubled = moments.thirds_of_points(HOUSE[[0, 0, 1, 2, 3]])
    np.testing.assert_allclose(moments.thirds_of_points(HOUSE[:4], (2, 1, 1, 1)), doubled,
                               atol=1e-15)


@given(corners4, st.floats(0.2, 3.0), twist6)
def test_the_orientation_of_a_region_changes_as_its_row_says(corners, depth, twist):
    """Any quadrangle: also one that is not convex, or crosses itself and counts one part less."""
    x, y = corners.T
    assume(abs(x @ np.roll(y, -1) - y @ np.roll(x, -1)) > 0.06)
    found = moments.of_polygon(corners)
    assume(np.hypot(found.n20 - found.n02, 2 * found.n11) > 0.01)
    row = moments.orientation_row(found, moments.thirds_of_polygon(corners))
    assert row[5] == -1 and not row[:3].any()
    assert row @ twist == pytest.approx(turning(moments.of_polygon, corners, depth, twist),
                                        rel=2e-5, abs=2e-5)


@given(corners4, st.floats(0.2, 3.0), twist6)
def test_the_orientation_of_points_changes_as_its_row_says(corners, depth, twist):
    found = moments.of_points(corners)
    assume(np.hypot(found.n20 - found.n02, 2 * found.n11) > 0.01)
    row = moments.orientation_row(found, moments.thirds_of_points(corners))
    assert row[5] == -1 and not row[:3].any()
    assert row @ twist == pytest.approx(turning(moments.of_points, corners, depth, twist),
                                        rel=2e-5, abs=2e-5)


def test_rows_of_many_shapes_are_those_of_each_alone():
    shapes = np.stack([RECTANGLE, HOUSE[:4], RECTANGLE + (0.1, -0.2)])
    together = moments.orientation_row(moments.of_polygon(shapes),
                                       moments.thirds_of_polygon(shapes))
    alone = [moments.orientation_row(moments.of_polygon(shape), moments.thirds_of_polygon(shape))
             for shape in shapes]
    np.testing.assert_allclose(together, alone, atol=1e-13)


def test_a_shape_without_a_main_axis_has_no_finite_row():
    square = np.array([(-0.1, -0.1), (0.1, -0.1), (0.1, 0.1), (-0.1, 0.1)])
    row = moments.orientation_row(moments.of_points(square), moments.thirds_of_points(square))
    assert not np.isfinite(row[3:5]).any()
