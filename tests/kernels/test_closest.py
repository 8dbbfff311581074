"""Closest points: against brute force and closed forms."""

import numpy as np
import pytest

from volmap.kernels.closest import build_tree, closest, refit


def brute_force(points, triangles, query, samples=60):
    """Slow twin: the smallest distance to a fine barycentric sampling of every triangle (an upper bound)."""
    i, j = np.meshgrid(np.arange(samples + 1), np.arange(samples + 1), indexing="ij")
    keep = i + j <= samples
    v, w = i[keep] / samples, j[keep] / samples
    b = np.stack([1 - v - w, v, w], axis=1)
    placed = np.einsum("sk,mkd->msd", b, points[triangles])
    return np.linalg.norm(placed - query, axis=2).min()


def soup(n_triangles, seed):
    rng = np.random.default_rng(seed)
    corners = rng.normal(size=(n_triangles, 1, 3)) * 3 + rng.normal(size=(n_triangles, 3, 3))
    return corners.reshape(-1, 3), np.arange(3 * n_triangles).reshape(-1, 3)


@pytest.mark.parametrize("n_triangles", [1, 3, 200])
def test_closest_point_agrees_with_brute_force(n_triangles):
    points, triangles = soup(n_triangles, seed=n_triangles)
    queries = np.random.default_rng(9).normal(size=(40, 3)) * 4
    triangle, barycentric, squared = closest(build_tree(points, triangles), points, triangles, queries)
    foot = np.einsum("qk,qkd->qd", barycentric, points[triangles[triangle]])
    np.testing.assert_allclose(np.linalg.norm(foot - queries, axis=1) ** 2, squared, atol=1e-12)
    assert (barycentric >= -1e-12).all()
    for q, query in enumerate(queries):
        bound = brute_force(points, triangles, query)
        distance = np.sqrt(squared[q])
        assert distance <= bound + 1e-12
        assert bound - distance < 0.15  # the sampling's own coarseness


def test_regions_of_one_triangle():
    """Closed form: a right triangle in the plane z = 0, one query for each of its seven regions."""
    points = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    triangles = np.array([[0, 1, 2]])
    queries = np.array(
        [[0.2, 0.2, 1], [-1, -1, 0], [2, -0.5, 0], [-0.5, 2, 0], [0.5, -1, 0], [-1, 0.5, 0], [1, 1, 0.0]]
    )
    _, _, squared = closest(build_tree(points, triangles), points, triangles, queries)
    np.testing.assert_allclose(squared, [1, 2, 1.25, 1.25, 1, 1, 0.5], atol=1e-15)


def test_guess_and_refit_do_not_change_the_answer():
    points, triangles = soup(300, seed=5)
    tree = build_tree(points, triangles)
    moved = points + np.sin(points[:, ::-1])
    refit(tree, moved, triangles)
    queries = np.random.default_rng(3).normal(size=(200, 3)) * 4
    fresh = closest(build_tree(moved, triangles), moved, triangles, queries)
    guess = np.random.default_rng(4).integers(0, 300, 200)
    again = closest(tree, moved, triangles, queries, guess=guess)
    for a, b in zip(fresh, again, strict=True):
        np.testing.assert_array_equal(a, b)
