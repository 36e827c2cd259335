# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Interaction matrices against published entries, OpenCV, Pinocchio and exact finite motion.

Numbers are recomputed from the formulas of Chaumette & Hutchinson 2006, Malis et al. 1999,
Iwatsuki & Okiyama 2005 and Chaumette 2004 with SymPy, SciPy and OpenCV.
"""

from __future__ import annotations

import cv2
import numpy as np
import pytest
import scipy.linalg
from hypothesis import given
from hypothesis import strategies as st

from servo_nodes import motion
from servo_nodes.control import interaction, moments

pin = pytest.importorskip('pinocchio', reason='the outside oracle Pinocchio is not installed')

coordinate = st.floats(-0.8, 0.8)
depth = st.floats(0.2, 3.0)
speed = st.floats(-1.0, 1.0)
twist6 = st.tuples(*[speed] * 6).map(np.array)
points5 = st.lists(st.tuples(coordinate, coordinate, depth), min_size=5, max_size=5).map(np.array)


def after(points_C: np.ndarray, twist: np.ndarray, dt: float) -> np.ndarray:
    """Return points (..., 3) after the camera moved, through SciPy's matrix exponential."""
    generator = np.zeros((4, 4))
    generator[:3, :3] = [[0, -twist[5], twist[4]], [twist[5], 0, -twist[3]],
                         [-twist[4], twist[3], 0]]
    generator[:3, 3] = twist[:3]
    pose = scipy.linalg.expm(-generator * dt)
    return points_C @ pose[:3, :3].T + pose[:3, 3]


def derivative(feature, points_C: np.ndarray, twist: np.ndarray, dt: float = 1e-5) -> np.ndarray:
    """Return the central difference of `feature(points)` over the exact motion."""
    return (feature(after(points_C, twist, dt)) - feature(after(points_C, twist, -dt))) / (2 * dt)


def image(points_C: np.ndarray) -> np.ndarray:
    return points_C[..., :2] / points_C[..., 2:]


@pytest.mark.parametrize('x, y, z, first, second', [
    (0.1, -0.2, 0.5, [-2, 0, 0.2, -0.02, -1.01, -0.2], [0, -2, -0.4, 1.04, 0.02, -0.1]),
    (-0.35, 0.25, 1.7, [-0.5882352941, 0, -0.2058823529, -0.0875, -1.1225, 0.25],
     [0, -0.5882352941, 0.1470588235, 1.0625, 0.0875, 0.35]),
    (0, 0, 2, [-0.5, 0, 0, 0, -1, 0], [0, -0.5, 0, 1, 0, 0]),
    (0.8, 0.6, 0.25, [-4, 0, 3.2, 0.48, -1.64, 0.6], [0, -4, 2.4, 1.36, -0.48, -0.8]),
])
def test_a_point_has_the_published_rows(x, y, z, first, second):
    rows = interaction.points([[x, y]], [z])
    np.testing.assert_allclose(rows, [first, second], atol=1e-9)


@pytest.mark.parametrize('axis, point, expected', [
    (0, (0, 0), (-1, 0)), (1, (0, 0), (0, -1)), (2, (0.3, 0.2), (1, 1)), (3, (0, 0), (0, 1)),
    (4, (0, 0), (-1, 0)), (5, (0.3, 0.2), (1, -1))])
def test_content_moves_the_way_an_operator_sees_it(axis, point, expected):
    """+vx left, +vy up, +vz outwards, +wx down, +wy left, +wz counter-clockwise on the screen."""
    motion_xy = interaction.points([point], [1.0])[:, axis]
    assert tuple(np.sign(np.round(motion_xy, 12))) == expected


def test_the_stack_equals_opencv_pixel_jacobian_through_the_pose_map():
    """cv2.projectPoints differentiates by pose; the chain rule leads to the camera's twist."""
    r, t = np.array([0.2, -0.3, 0.1]), np.array([0.05, -0.1, 0.8])
    point = np.array([[0.1, 0.05, 0.02]])
    K = np.array([[517.3, 0, 318.6], [0, 516.5, 255.3], [0, 0, 1]])
    _, jacobian = cv2.projectPoints(point, r, t, K, None)
    to_twist = np.zeros((6, 6))
    to_twist[:3, 3:] = -motion.left_jacobian_inverse(r)
    to_twist[3:, :3] = -np.eye(3)
    to_twist[3:, 3:] = motion.skew(t)
    X = motion.rotation_from_vector(r) @ point[0] + t
    ours = np.diag([517.3, 516.5]) @ interaction.points([X[:2] / X[2]], [X[2]])
    np.testing.assert_allclose(np.asarray(jacobian)[:, :6] @ to_twist, ours, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(ours, [
        [-602.8888987, 0, 93.47065109, -4.546056069, -529.7342169, -29.32221724],
        [0, -601.9565362, -34.12082026, 518.1595066, 4.539025632, -80.07709446]], rtol=1e-6)


def test_first_order_motion_leaves_the_known_gap_to_exact_motion():
    """IM-E: P = (0.2, -0.1, 1), 0.04 s; checked with Pinocchio's exponential."""
    P, xi, dt = np.array([0.2, -0.1, 1]), np.array([0.05, -0.03, 0.1, 0.2, -0.1, 0.3]), 0.04
    exact = pin.exp6(pin.Motion(-xi * dt)).act(P)
    np.testing.assert_allclose(exact, [0.2008326778, -0.09322100761, 0.9959712123], atol=1e-9)
    first = image(P) + interaction.points([image(P)], [1.0]) @ xi * dt
    np.testing.assert_allclose(first, [0.2016, -0.0936], atol=1e-12)
    assert np.linalg.norm(image(exact) - first) == pytest.approx(0.000045103215, rel=1e-6)


def test_singular_values_of_the_centred_square_have_their_closed_form():
    q, Z = 0.2, 0.5
    square = np.array([(-q, -q), (q, -q), (q, q), (-q, q)])
    stack = interaction.points(square, np.full(4, Z))
    pair = np.sqrt(np.linalg.eigvalsh([[4 / Z ** 2, 4 * (1 + q * q) / Z],
                                       [4 * (1 + q * q) / Z, 4 * (1 + q * q) ** 2 + 4 * q ** 4]]))
    expected = sorted([8 ** 0.5 * q / Z, 8 ** 0.5 * q, *pair, *pair], reverse=True)
    values = np.linalg.svd(stack, compute_uv=False)
    np.testing.assert_allclose(values, expected, rtol=1e-9)
    np.testing.assert_allclose(values, [4.508632005, 4.508632005, 1.13137085, 0.5656854249,
                                        0.07097496528, 0.07097496528], rtol=1e-9)
    assert values[0] / values[-1] == pytest.approx(63.52425798, rel=1e-9)


def test_stretch_and_shear_of_the_centred_square_are_out_of_reach():
    """IM-H2: such errors are not moved by any twist although they are not zero."""
    q = 0.2
    square = np.array([(-q, -q), (q, -q), (q, q), (-q, q)])
    inverse = np.linalg.pinv(interaction.points(square, np.full(4, 0.5)))
    stretch, shear = square * (1, -1), square[:, ::-1]
    assert np.abs(inverse @ stretch.ravel()).max() < 1e-12
    assert np.abs(inverse @ shear.ravel()).max() < 1e-12


@given(points5, twist6)
def test_points_move_as_their_rows_say(points, twist):
    X = np.concatenate([points[:, :2] * points[:, 2:], points[:, 2:]], axis=1)
    rows = interaction.points(points[:, :2], points[:, 2])
    np.testing.assert_allclose(rows @ twist, derivative(image, X, twist).ravel(), atol=2e-6,
                               rtol=2e-6)


@given(points5, twist6)
def test_polar_coordinates_move_as_their_rows_say(points, twist):
    rho = np.hypot(points[:, 0], points[:, 1])
    points = points[(rho > 0.05)]
    if not len(points):
        return
    X = np.concatenate([points[:, :2] * points[:, 2:], points[:, 2:]], axis=1)
    here = interaction.polar_coordinates(points[:, :2])

    def feature(moved):
        now = interaction.polar_coordinates(image(moved))
        turned = np.remainder(now[:, 1] - here[:, 1] + np.pi, 2 * np.pi) - np.pi
        return np.stack([now[:, 0], here[:, 0] * turned], axis=-1).ravel()

    rows = interaction.polar(points[:, :2], points[:, 2])
    np.testing.assert_allclose(rows @ twist, derivative(feature, X, twist), atol=2e-5, rtol=2e-5)


def test_polar_rows_are_the_published_ones():
    rows = interaction.polar([[0.15, -0.1]], [0.8])
    rho = 0.1802775638
    np.testing.assert_allclose(interaction.polar_coordinates([[0.15, -0.1]]),
                               [[rho, -0.5880026035]], atol=1e-9)
    np.testing.assert_allclose(rows[0], [-1.040062868, 0.6933752453, 0.2253469547, -0.5727279526,
                                         -0.8590919289, 0], atol=1e-9)
    np.testing.assert_allclose(rows[1] / rho, [-3.846153846, -5.769230769, 0, 4.615384615,
                                               -3.076923077, -1], atol=1e-8)


def test_polar_rows_are_finite_in_the_middle_of_the_image():
    assert np.isfinite(interaction.polar([[0.0, 0.0]], [0.5])).all()


def test_the_matrix_of_theta_u_has_the_published_numbers_and_is_pinocchios_jlog3():
    u, theta = np.array([1, 2, -2]) / 3, 1.2
    L = interaction.theta_u(theta * u)
    np.testing.assert_allclose(L, [[0.8906822829, 0.4273294293, 0.3726705707],
                                   [-0.3726705707, 0.9316764268, -0.2546588586],
                                   [-0.4273294293, 0.1453411414, 0.9316764268]], atol=1e-9)
    assert np.linalg.det(L) == pytest.approx(1.129159815, rel=1e-9)
    np.testing.assert_allclose(L, pin.Jlog3(pin.exp3(theta * u)), atol=1e-9)
    np.testing.assert_allclose(L @ (theta * u), theta * u, atol=1e-12)


@given(st.tuples(*[st.floats(-1.5, 1.5)] * 3).map(np.array), st.tuples(*[speed] * 3).map(np.array))
def test_theta_u_changes_as_its_matrix_says(vector, w):
    R, dt = motion.rotation_from_vector(vector), 1e-5

    def at(time):
        return motion.vector_from_rotation(R @ scipy.linalg.expm(motion.skew(w) * time))

    np.testing.assert_allclose(interaction.theta_u(vector) @ w, (at(dt) - at(-dt)) / (2 * dt),
                               atol=1e-6)


def test_the_hybrid_stack_has_the_published_rows():
    theta_u = np.array([0.4, 0.8, -0.8])
    rows = interaction.hybrid(np.array([0.15, -0.1]), np.array(0.8), theta_u)
    np.testing.assert_allclose(rows[:3], [[-1.25, 0, 0.1875, -0.015, -1.0225, -0.1],
                                          [0, -1.25, -0.125, 1.01, 0.015, -0.15],
                                          [0, 0, -1.25, 0.1, 0.15, 0]], atol=1e-9)
    np.testing.assert_allclose(rows[3:, 3:], interaction.theta_u(theta_u))
    assert not rows[3:, :3].any()


@given(coordinate, coordinate, depth, twist6)
def test_the_log_depth_ratio_changes_as_its_row_says(x, y, z, twist):
    X = np.array([x * z, y * z, z])
    np.testing.assert_allclose(interaction.log_depth_ratio([x, y], z) @ twist,
                               derivative(lambda X: np.log(X[2] / 0.5), X, twist), atol=1e-6,
                               rtol=1e-6)


@pytest.mark.parametrize('corners, z, area, centre, seconds, rows', [
    ([(-0.1, -0.05), (0.1, -0.05), (0.1, 0.05), (-0.1, 0.05)], 0.5, 0.08, (0, 0),
     (0.01333333333, 0, 0.003333333333),
     [[0, 0, 0.32, 0, 0, 0], [-2, 0, 0, 0, -1.053333333, 0], [0, -2, 0, 1.013333333, 0, 0]]),
    ([(0.05, 0.02), (0.3, 0.1), (0.1, 0.25)], 0.8, 0.041796875, (0.1875, 0.1541666667),
     (0.004557291667, 0.000065104167, 0.003550347222),
     [[0, 0, 0.1044921875, 0.01933105469, -0.02351074219, 0],
      [-1.25, 0, 0.234375, 0.02916666667, -1.053385417, 0.1541666667],
      [0, -1.25, 0.1927083333, 1.03796875, -0.02916666667, -0.1875]]),
])
def test_moments_of_a_region_have_the_published_values_and_rows(corners, z, area, centre, seconds,
                                                                rows):
    found = moments.of_polygon(np.array(corners) / z)
    assert found.area == pytest.approx(area, abs=1e-9)
    np.testing.assert_allclose(found.centre, centre, atol=1e-9)
    np.testing.assert_allclose([found.n20, found.n11, found.n02], seconds, atol=1e-9)
    np.testing.assert_allclose(moments.area_row(found, z), rows[0], atol=1e-7)
    np.testing.assert_allclose(moments.centre_rows(found, z), rows[1:], atol=1e-7)


def test_normalised_moments_decouple_translation():
    found = moments.of_polygon(np.array([(0.05, 0.02), (0.3, 0.1), (0.1, 0.25)]) / 0.8)
    assert np.degrees(found.orientation) == pytest.approx(3.684025536, abs=1e-7)
    np.testing.assert_allclose(moments.normalised(found, 0.1, 0.5),
                               [0.1450104734, 0.1192308336, 0.7733891912], atol=1e-9)
    rows = moments.normalised_rows(found, 0.8, 0.1, 0.5)
    np.testing.assert_allclose(rows[:, :3], -0.966736489 * np.eye(3), atol=1e-8)
    np.testing.assert_allclose(rows[:, 3:], [
        [-0.01097648722, -0.7738926998, 0.1192308336],
        [0.7751816818, 0.01097648722, -0.1450104734],
        [-0.1788462505, 0.21751571, 0]], atol=1e-8)


def test_moments_of_points_have_the_published_values_and_rows():
    points = np.array([(0.05, 0.02), (0.3, 0.1), (0.1, 0.25), (-0.1, 0.05)]) / 0.8
    found = moments.of_points(points)
    np.testing.assert_allclose(found.centre, [0.109375, 0.13125], atol=1e-12)
    assert 4 * (found.n20 + found.n02) == pytest.approx(0.1768359375, abs=1e-10)
    np.testing.assert_allclose(moments.centre_rows(found, 0.8), [
        [-1.25, 0, 0.13671875, 0.019921875, -1.043945312, 0.13125],
        [0, -1.25, 0.1640625, 1.029453125, -0.019921875, -0.109375]], atol=1e-7)
    np.testing.assert_allclose(moments.spread_row(points, 0.8), [
        0, 0, 0.4420898437, 0.06417382812, -0.08182128906, 0], atol=1e-7)
    with pytest.raises(ValueError, match='expected the moments of a region'):
        moments.area_row(found, 0.8)


@given(st.lists(st.tuples(coordinate, coordinate), min_size=3, max_size=3).map(np.array), depth,
       twist6)
def test_moments_of_a_region_and_of_points_change_as_their_rows_say(corners, z, twist):
    edges = np.diff(corners, axis=0)
    if abs(edges[0, 0] * edges[1, 1] - edges[0, 1] * edges[1, 0]) < 0.02:
        return
    X = np.concatenate([corners * z, np.full((3, 1), z)], axis=1)

    def region(points):
        found = moments.of_polygon(image(points))
        return np.array([found.area, *found.centre])

    found = moments.of_polygon(corners)
    rows = np.vstack([moments.area_row(found, z), moments.centre_rows(found, z)])
    np.testing.assert_allclose(rows @ twist, derivative(region, X, twist), atol=1e-5, rtol=1e-5)
    rows = np.vstack([moments.centre_rows(moments.of_points(corners), z),
                      moments.spread_row(corners, z)])

    def cloud(points):
        found = moments.of_points(image(points))
        return np.array([*found.centre, 3 * (found.n20 + found.n02)])

    np.testing.assert_allclose(rows @ twist, derivative(cloud, X, twist), atol=1e-5, rtol=1e-5)
