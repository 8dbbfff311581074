"""Contact: published barrier, closed-form meetings, brute force, finite differences, and its law."""

import numpy as np
import pytest
from scipy.optimize import minimize

from volmap.kernels import barrier, contact
from volmap.kernels.closest import build_tree
from volmap.kernels.compiled import kernel
from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.ties import Ties, add_diagonal, add_product

gap_of = kernel(contact._gap.py_func)


def test_published_barrier():
    """-(d - r)^2 ln(d / r) at r = 1, d = .5 (Li et al. 2020, recomputed)."""
    np.testing.assert_allclose(barrier.barrier.py_func(0.5, 1.0), (0.173287, -1.193147, 6.386294), atol=1e-6)
    assert barrier.barrier.py_func(1.0, 1.0) == (0.0, 0.0, 0.0)
    assert barrier.barrier.py_func(0.0, 1.0)[0] == np.inf


def two_triangles(height):
    """A triangle in z = 0 and another one above it, turned, so that a corner, an edge and a face can meet."""
    low = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    high = np.array([[0.3, 0.3, height], [1.2, 0.4, height + 0.5], [0.4, 1.2, height + 0.5]])
    return np.concatenate([low, high]), np.array([[0, 1, 2], [3, 4, 5]])


@pytest.mark.parametrize("drop", [0.5, 0.999, 1.001, 2.0, 10.0])
def test_a_corner_falling_on_a_face(drop):
    """Closed form: the corner at height 1 meets the plane after 1 / drop of the way."""
    points, triangles = two_triangles(1.0)
    there = points.copy()
    there[3:, 2] -= drop
    share = contact.longest_step(contact.skin_of(points, triangles), points, there)
    if drop < 0.9:
        assert share == 1.0
    else:
        assert share * drop < 1.0
        assert share >= (1 - contact.KEPT) * 0.9 * min(1.0, 1 / drop)


def test_two_edges_meeting():
    """Closed form: crossed edges at a distance of 1, one sinking by 2: they meet half way."""
    points = np.array([[-1.0, 0, 0], [1, 0, 0], [0, 0, -3], [0, -1, 1], [0, 1, 1], [0, 0, 4]])
    skin = contact.skin_of(points, np.array([[0, 1, 2], [3, 4, 5]]))
    there = points.copy()
    there[3:, 2] -= 2.0
    assert 0.4 < contact.longest_step(skin, points, there) < 0.5


def test_moving_together_is_free():
    points, triangles = two_triangles(0.01)
    skin = contact.skin_of(points, triangles)
    assert contact.longest_step(skin, points, points + np.array([100.0, -50.0, 3.0])) == 1.0


def smallest_distance(a, b):
    """Independent library: the distance of two simplices as a small constrained minimisation."""

    def gap(x):
        u, v = x[: len(a)], x[len(a) :]
        return ((u @ a - v @ b) ** 2).sum()

    n = len(a) + len(b)
    sums = [
        {"type": "eq", "fun": lambda x: x[: len(a)].sum() - 1},
        {"type": "eq", "fun": lambda x: x[len(a) :].sum() - 1},
    ]
    best = min(
        minimize(gap, start, bounds=[(0, 1)] * n, constraints=sums, tol=1e-14).fun
        for start in (np.full(n, 0.3), np.linspace(0.1, 0.6, n), np.linspace(0.6, 0.1, n))
    )
    return np.sqrt(best)


@pytest.mark.parametrize("of_edges", [False, True])
def test_distances_against_a_general_minimiser(of_edges):
    rng = np.random.default_rng(3)
    weights, gap = np.empty(4), np.empty(3)
    for _ in range(40):
        x = rng.normal(size=(4, 3))
        found = gap_of(of_edges, x, weights, gap)
        parts = (x[:2], x[2:]) if of_edges else (x[:1], x[1:])
        assert found == pytest.approx(smallest_distance(*parts), abs=2e-5)
        np.testing.assert_allclose(weights @ x, gap, atol=1e-14)
        assert weights[:2].sum() == pytest.approx(1) if of_edges else weights[0] == 1


def sphere(levels=3, radius=5.0, centre=(0.0, 0.0, 0.0)):
    """An octahedron, each face halved along its edges a few times, blown up."""
    corners = np.array([[1.0, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]])
    faces = np.array([[0, 2, 4], [2, 1, 4], [1, 3, 4], [3, 0, 4], [2, 0, 5], [1, 2, 5], [3, 1, 5], [0, 3, 5]])
    soup = corners[faces]
    for _ in range(levels):
        a, b, c = soup[:, 0], soup[:, 1], soup[:, 2]
        ab, bc, ca = (a + b) / 2, (b + c) / 2, (c + a) / 2
        soup = np.concatenate([np.stack(t, 1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))])
    points, inverse = np.unique(soup.reshape(-1, 3), axis=0, return_inverse=True)
    points = points / np.linalg.norm(points, axis=1, keepdims=True) * radius + centre
    return points, inverse.reshape(-1, 3).astype(np.int64)


def two_spheres(gap):
    a, fa = sphere()
    b, fb = sphere()
    turn, _ = np.linalg.qr(np.random.default_rng(5).normal(size=(3, 3)))  # no edge parallel to another
    b = b @ turn.T + (10.0 + gap, 0.4, 0.3)
    return np.concatenate([a, b]), np.concatenate([fa, fb + len(a)])


def brute_force_pairs(points, triangles, reach):
    """Slow twin: every pair without a common point, by `_gap` alone."""
    skin = contact.skin_of(points, triangles)
    count = 0
    w, g = np.empty(4), np.empty(3)
    for p in skin.points[:, 0]:
        for t in triangles:
            count += p not in t and gap_of(False, points[[p, *t]], w, g) < reach
    edges = skin.edges[:, :2]
    for i, e in enumerate(edges):
        for f in edges[i + 1 :]:
            if not set(e) & set(f):
                count += gap_of(True, points[[*e, *f]], w, g) < reach
    return count


def test_near_pairs_against_all_pairs():
    rng = np.random.default_rng(1)
    points = rng.normal(size=(36, 3)) * 2
    triangles = np.arange(36).reshape(-1, 3)
    skin = contact.skin_of(points, triangles)
    for reach in (0.1, 0.8):
        pairs = contact.near_pairs(skin, points, reach)
        assert len(pairs.corners) == brute_force_pairs(points, triangles, reach) > 0
        assert (np.linalg.norm(pairs.gaps, axis=1) < reach).all()


def test_barrier_gradient_against_finite_differences():
    points, triangles = two_spheres(gap=0.3)
    skin = contact.skin_of(points, triangles)

    def value(x, gradient):
        pairs = contact.near_pairs(skin, x, 0.6)
        k = len(pairs.corners)
        return barrier.add_barrier(pairs, 0.6, 2.0, gradient, np.empty((k, 3)), np.empty(k))

    gradient = np.zeros_like(points)
    assert value(points, gradient) > 0
    loud = np.argsort(-np.abs(gradient).ravel())[:12]
    for column in loud:
        slope = 0.0
        for sign in (1, -1):
            x = points.copy()
            x.ravel()[column] += sign * 1e-6
            slope += sign * value(x, np.zeros_like(points)) / 2e-6
        assert slope == pytest.approx(gradient.ravel()[column], rel=1e-4)


def test_steps_never_make_a_crossing():
    """The law: pushed together again and again by wild directions, two bodies never cross (exact test)."""
    points, triangles = two_spheres(gap=0.5)
    skin = contact.skin_of(points, triangles)
    rng = np.random.default_rng(7)
    half = len(points) // 2
    stopped = 0
    for _ in range(12):
        push = 0.4 * rng.normal(size=points.shape)
        push[:half, 0] += 1.5
        push[half:, 0] -= 1.5
        share = contact.longest_step(skin, points, points + push)
        stopped += share < 1.0
        points = points + share * push
        assert len(triangle_crossings(points, triangles)) == 0
    assert stopped > 6  # the bodies really met


def test_ties_against_dense():
    rng = np.random.default_rng(0)
    ties = Ties(
        np.array([[0, 1, 2, 3], [4, 1, 0, 5]]),
        rng.normal(size=(2, 4)),
        np.array([[1.0, 0, 0], [0, 0.6, 0.8]]),
        np.array([2.0, 5.0]),
    )
    dense = np.zeros((18, 18))
    for corners, weights, normal, stiffness in zip(*ties, strict=True):
        row = np.zeros((6, 3))
        row[corners] = weights[:, None] * normal
        dense += stiffness * np.outer(row, row)
    x = rng.normal(size=(6, 3))
    out = np.zeros((6, 3))
    add_product.py_func(ties, x, out)
    np.testing.assert_allclose(out.ravel(), dense @ x.ravel(), atol=1e-12)
    diagonal = np.zeros((6, 3, 3))
    add_diagonal.py_func(ties, diagonal)
    for p in range(6):
        np.testing.assert_allclose(diagonal[p], dense[3 * p : 3 * p + 3, 3 * p : 3 * p + 3], atol=1e-12)


def test_an_edge_has_a_tree_too():
    """Closed form: the tree of one segment, written as a triangle without extent."""
    points = np.array([[0.0, 0, 0], [2, 0, 0]])
    tree = build_tree(points, np.array([[0, 1, 1]]))
    np.testing.assert_array_equal(tree.low[0], [0, 0, 0])
    np.testing.assert_array_equal(tree.high[0], [2, 0, 0])
