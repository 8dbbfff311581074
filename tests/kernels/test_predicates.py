"""Orientation signs against rational arithmetic, the slow twin that cannot round."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from volmap.kernels import predicates
from volmap.kernels.compiled import kernel
from volmap.kernels.predicates import orientation_signs

orient_2d, orient_3d = kernel(predicates.orient_2d.py_func), kernel(predicates.orient_3d.py_func)

TET = np.array([[0, 1, 2, 3]])
REFERENCE = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])


def sign_by_cofactors(corners):
    """Sign of the 4x4 determinant with a column of ones, by rational Gaussian elimination."""
    rows = [[Fraction(float(c)) for c in p] + [Fraction(1)] for p in corners]
    sign = 1
    for i in range(4):
        pivot = next((r for r in range(i, 4) if rows[r][i] != 0), None)
        if pivot is None:
            return 0
        if pivot != i:
            rows[i], rows[pivot], sign = rows[pivot], rows[i], -sign
        sign *= 1 if rows[i][i] > 0 else -1
        for r in range(i + 1, 4):
            factor = rows[r][i] / rows[i][i]
            rows[r] = [a - factor * b for a, b in zip(rows[r], rows[i], strict=True)]
    return -sign  # det[p; 1] of four points is minus det of the three edges from the first


def test_reference_tet_is_positive_and_its_mirror_is_not():
    assert orientation_signs(REFERENCE, TET)[0] == 1
    assert orientation_signs(REFERENCE, TET[:, [0, 2, 1, 3]])[0] == -1
    assert sign_by_cofactors(REFERENCE) == 1


plain_size = st.floats(-1e3, 1e3, allow_subnormal=False).filter(lambda x: x == 0 or abs(x) > 1e-75)
weights = st.floats(-1, 2, allow_subnormal=False)


@settings(max_examples=300, deadline=None)
@given(st.lists(plain_size, min_size=9, max_size=9), weights, weights, st.integers(-3, 3))
def test_nearly_coplanar_tets_have_the_rational_sign(values, s, t, nudges):
    """The fourth point is put on the plane of the others up to rounding, then moved by a few last bits."""
    a, b, c = np.array(values).reshape(3, 3)
    d = a + s * (b - a) + t * (c - a)
    for _ in range(abs(nudges)):
        d[2] = np.nextafter(d[2], np.inf if nudges > 0 else -np.inf)
    corners = np.array([a, b, c, d])
    assert orientation_signs(corners, TET)[0] == sign_by_cofactors(corners)


@settings(max_examples=200, deadline=None)
@given(st.lists(st.integers(-2, 2), min_size=12, max_size=12), st.sampled_from([0.1, 1 / 3, 1e-9, 7.3e8]))
def test_lattice_tets_have_the_rational_sign(values, step):
    corners = np.array(values, float).reshape(4, 3) * step + np.array([0.7, -0.3, 1e4]) * (step == 0.1)
    assert orientation_signs(corners, TET)[0] == sign_by_cofactors(corners)


def test_numbers_too_small_or_large_for_products_are_decided_by_fractions():
    for size in (1e-160, 5e-324, 1e150):
        corners = REFERENCE * size
        assert orientation_signs(corners, TET)[0] == 1
        assert orientation_signs(corners, TET[:, [1, 0, 2, 3]])[0] == -1
    flat = REFERENCE.copy()
    flat[3] = [1e-200, 0, 0]
    assert orientation_signs(flat, TET)[0] == 0


def test_floating_point_alone_would_be_wrong():
    """Points next to a plane through (12,12,12) and (24,24,24), in the manner of Kettner et al. (2008)."""
    base = np.array([[0.5, 0.5, 0.5], [12, 12, 12], [24, 24, 24], [24.0, 12.0, 30.0]])
    grid = np.arange(16) * 2.0**-53
    points = np.tile(base, (256, 1, 1))
    points[:, 0, 0] += np.repeat(grid, 16)
    points[:, 0, 1] += np.tile(grid, 16)
    tets = np.arange(4 * len(points)).reshape(-1, 4)
    exact = np.array([sign_by_cofactors(p) for p in points])
    assert np.array_equal(orientation_signs(points.reshape(-1, 3), tets), exact)
    naive = np.sign([np.linalg.det(p[1:] - p[0]) for p in points])
    assert (naive != exact).any()
    assert len(np.unique(exact)) == 3


def test_swapping_corners_changes_the_sign():
    rng = np.random.default_rng(3)
    points = rng.normal(size=(40, 3))
    tets = np.array([rng.permutation(40)[:4] for _ in range(100)])
    assert np.array_equal(orientation_signs(points, tets), -orientation_signs(points, tets[:, [0, 1, 3, 2]]))


@settings(max_examples=200, deadline=None)
@given(st.lists(st.integers(-3, 3), min_size=6, max_size=6), st.integers(0, 2))
def test_flat_triangles_have_the_rational_sign(values, axis):
    points = np.zeros((3, 3))
    u, v = (axis + 1) % 3, (axis + 2) % 3
    points[:, [u, v]] = np.array(values).reshape(3, 2) * 0.1 + 0.7
    p = [[Fraction(float(points[i, w])) for w in (u, v)] for i in range(3)]
    det = (p[1][0] - p[0][0]) * (p[2][1] - p[0][1]) - (p[1][1] - p[0][1]) * (p[2][0] - p[0][0])
    assert orient_2d(points, axis, 0, 1, 2) == (det > 0) - (det < 0)


@settings(max_examples=200, deadline=None)
@given(st.lists(plain_size, min_size=4, max_size=4), weights, st.integers(-3, 3), st.integers(0, 2))
def test_nearly_collinear_points_have_the_rational_sign(values, t, nudges, axis):
    """The third point is put on the line of the others up to rounding, then moved by a few last bits."""
    u, v = (axis + 1) % 3, (axis + 2) % 3
    points = np.zeros((3, 3))
    points[:2, [u, v]] = np.array(values).reshape(2, 2)
    points[2] = points[0] + t * (points[1] - points[0])
    for _ in range(abs(nudges)):
        points[2, v] = np.nextafter(points[2, v], np.inf if nudges > 0 else -np.inf)
    p = [[Fraction(float(points[i, w])) for w in (u, v)] for i in range(3)]
    det = (p[1][0] - p[0][0]) * (p[2][1] - p[0][1]) - (p[1][1] - p[0][1]) * (p[2][0] - p[0][0])
    if np.abs(points[points != 0]).min(initial=1) > 1e-75:
        assert orient_2d(points, axis, 0, 1, 2) == (det > 0) - (det < 0)


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_triangle_seen_along_an_axis_turns_as_its_tet(axis):
    """Counter-clockwise along an axis is positive with a fourth point further along it."""
    points = np.zeros((4, 3))
    points[1, (axis + 1) % 3] = points[2, (axis + 2) % 3] = points[3, axis] = 1.0
    assert orient_2d(points, axis, 0, 1, 2) == 1
    assert orient_3d(points, 0, 1, 2, 3) == 1
