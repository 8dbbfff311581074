"""Crossing triangles against clipping in rational arithmetic, and cases done by hand."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from volmap.kernels.crossings import triangle_crossings


def _minus(a, b):
    return [x - y for x, y in zip(a, b, strict=True)]


def _dot(a, b):
    return sum(x * y for x, y in zip(a, b, strict=True))


def _cross(a, b):
    return [a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]]


def _clip(polygon, normal, through):
    """Part of a convex polygon (or segment, or point) in a closed half space (Sutherland & Hodgman 1974)."""
    heights = [_dot(normal, _minus(p, through)) for p in polygon]
    kept = []
    for i, (p, h) in enumerate(zip(polygon, heights, strict=True)):
        q, g = polygon[(i + 1) % len(polygon)], heights[(i + 1) % len(polygon)]
        if h >= 0:
            kept.append(p)
        if h * g < 0:
            kept.append([x + (y - x) * h / (h - g) for x, y in zip(p, q, strict=True)])
    return kept


def common_points(s, t):
    """Corners of the common part of two triangles; `t` must have area."""
    normal = _cross(_minus(t[1], t[0]), _minus(t[2], t[0]))
    part = _clip(_clip(s, normal, t[0]), [-c for c in normal], t[0])
    for i in range(3):
        part = _clip(part, _cross(normal, _minus(t[(i + 1) % 3], t[i])), t[i])
    return part


def crosses_by_clipping(points, s, t):
    """The slow twin: any common point beyond what the shared corners span."""
    shared = [i for i in s if i in t]
    exact = [[Fraction(float(c)) for c in p] for p in points]
    corners_s, corners_t = [exact[i] for i in s], [exact[i] for i in t]
    if not any(_cross(_minus(corners_t[1], corners_t[0]), _minus(corners_t[2], corners_t[0]))):
        corners_s, corners_t = corners_t, corners_s
    part = common_points(corners_s, corners_t)
    if not shared:
        return bool(part)
    if len(shared) == 1:
        return any(p != exact[shared[0]] for p in part)
    if len(shared) == 2:
        a, b = exact[shared[0]], exact[shared[1]]
        return any(any(_cross(_minus(p, a), _minus(b, a))) for p in part)
    return True


def has_area(points, t):
    p = [[Fraction(float(c)) for c in points[i]] for i in t]
    return any(_cross(_minus(p[1], p[0]), _minus(p[2], p[0])))


def brute(points, triangles):
    n = len(triangles)
    pairs = [(i, j) for i in range(n) for j in range(i + 1, n)]
    return [p for p in pairs if crosses_by_clipping(points, list(triangles[p[0]]), list(triangles[p[1]]))]


@settings(max_examples=80, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([1.0, 0.1]), st.integers(1, 3), st.integers(7, 14))
def test_small_soups_of_lattice_triangles(seed, step, reach, n_points):
    """Few lattice places and shared corners: touching, lying on each other and hinges all occur."""
    rng = np.random.default_rng(seed)
    points = rng.integers(-reach, reach + 1, (n_points, 3)) * step + 0.3
    triangles = np.array([rng.permutation(n_points)[:3] for _ in range(8)])
    triangles = triangles[[has_area(points, t) for t in triangles]]
    assert [tuple(p) for p in triangle_crossings(points, triangles)] == brute(points, triangles)


def test_soup_in_general_position_and_its_motion():
    rng = np.random.default_rng(5)
    centres = rng.uniform(-2, 2, (36, 1, 3))
    points = (centres + rng.normal(size=(36, 3, 3))).reshape(-1, 3)
    triangles = np.arange(108).reshape(-1, 3)
    found = [tuple(p) for p in triangle_crossings(points, triangles)]
    assert found == brute(points, triangles)
    assert len(found) > 10
    assert [tuple(p) for p in triangle_crossings(points * [1, -1, 2], triangles)] == found


BASE = [[0.0, 0, 0], [4, 0, 0], [0, 4, 0]]


@pytest.mark.parametrize(
    ("other", "meets"),
    [
        ([[1, 1, -1], [1, 1, 1], [2, 2, 2]], True),  # an edge goes through the inside
        ([[1, 1, 0], [1, 1, 1], [2, 2, 2]], True),  # a corner touches the inside
        ([[0, 0, 0], [-1, -1, 1], [-1, -2, 1]], True),  # corner on corner, but not shared by number
        ([[2, -1, 0], [2, 0, 0], [2, -1, 1]], True),  # a corner touches an edge
        ([[2, -1, -1], [2, 1, 1], [2, -1, 2]], True),  # edges cross
        ([[1, 1, 0], [9, 1, 0], [1, 9, 0]], True),  # lying on each other
        ([[1, 1, 0], [1.5, 1, 0], [1, 1.5, 0]], True),  # one inside the other, in one plane
        ([[4, 0, 0], [8, 0, 0], [4, 4, 0]], True),  # in one plane, one corner touching
        ([[5, 0, 0], [8, 0, 0], [5, 4, 0]], False),  # in one plane, apart
        ([[1, 1, 1e-12], [2, 1, 1e-12], [1, 2, 1e-12]], False),  # parallel, a hair above
        ([[1, 1, 1e-300], [1, 1, 1], [2, 2, 2]], None),  # a coordinate whose products underflow
    ],
)
def test_pairs_without_a_common_corner(other, meets):
    points = np.array(BASE + other, float)
    triangles = np.array([[0, 1, 2], [3, 4, 5]])
    if meets is None:
        with pytest.raises(ValueError, match="cannot be exact"):
            triangle_crossings(points, triangles)
    else:
        assert len(triangle_crossings(points, triangles)) == int(meets)


@pytest.mark.parametrize(
    ("other", "meets"),
    [
        ([[-1, -1, 1], [-1, -2, 1]], False),  # corner to corner
        ([[1, 1, 1], [2, 1, 1]], False),  # standing on the corner
        ([[1, 1, -1], [1, 1, 1]], True),  # the opposite edge goes through
        ([[1, 1, 0], [1, 1, 1]], True),  # another corner lies on the triangle
        ([[2, 0, 0], [2, 0, 1]], True),  # another corner lies on an edge
        ([[-1, 0, 0], [0, -1, 0]], False),  # in one plane, back to back
        ([[1, 1, 0], [-1, 1, 0]], True),  # in one plane, overlapping
        ([[8, 8, 0], [8, 8, 8]], True),  # an edge runs through and beyond
    ],
)
def test_pairs_with_one_common_corner(other, meets):
    points = np.array(BASE + other, float)
    for s, t in (([0, 1, 2], [0, 3, 4]), ([2, 0, 1], [4, 3, 0]), ([1, 0, 2], [3, 0, 4])):
        assert len(triangle_crossings(points, np.array([s, t]))) == int(meets)


@pytest.mark.parametrize(
    ("apex", "meets"),
    [([0, -4, 0], False), ([0, 4, 1e-9], False), ([1, 3, 0], True), ([0, 8, 0], True), ([2, 0, 5], False)],
)
def test_a_hinge_crosses_only_when_folded_flat(apex, meets):
    points = np.array([*BASE, apex], float)
    for s, t in (([0, 1, 2], [0, 1, 3]), ([2, 0, 1], [3, 1, 0]), ([1, 2, 0], [0, 3, 1])):
        assert len(triangle_crossings(points, np.array([s, t]))) == int(meets)


def test_a_triangle_without_area_still_crosses_as_a_segment():
    points = np.array([*BASE, [1, 1, -1], [1, 1, 0.5], [1, 1, 2]], float)
    assert len(triangle_crossings(points, np.array([[0, 1, 2], [3, 4, 5]]))) == 1
    needles = np.array([[0.0, 0, 0], [1, 0, 0], [2, 0, 0], [1, -1, 0], [1, 0, 0], [1, 3, 0]])
    assert len(triangle_crossings(needles, np.array([[0, 1, 2], [3, 4, 5]]))) == 1
    apart = needles + np.repeat([[0, 0, 0], [0, 0, 1]], 3, axis=0)
    assert len(triangle_crossings(apart, np.array([[0, 1, 2], [3, 4, 5]]))) == 0


def test_a_flat_sheet_does_not_cross_itself_but_two_on_one_place_do():
    n = 12
    index = np.arange(n * n).reshape(n, n)
    x, y = np.meshgrid(np.arange(n) * 0.1, np.arange(n) * 0.3, indexing="ij")
    points = np.stack([x.ravel(), y.ravel(), np.full(n * n, 0.7)], axis=1)
    a, b, c, d = (q.ravel() for q in (index[:-1, :-1], index[1:, :-1], index[1:, 1:], index[:-1, 1:]))
    sheet = np.concatenate([np.stack([a, b, c], 1), np.stack([a, c, d], 1)])
    assert len(triangle_crossings(points, sheet)) == 0
    both = triangle_crossings(np.concatenate([points, points]), np.concatenate([sheet, sheet + n * n]))
    assert len(both) >= len(sheet)


def test_no_triangles_no_crossings():
    assert triangle_crossings(np.zeros((0, 3)), np.zeros((0, 3), np.int64)).shape == (0, 2)
