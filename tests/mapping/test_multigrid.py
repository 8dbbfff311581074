"""Multigrid on lattices: against SciPy's sparse LU, and its laws."""

import numpy as np
import pytest
from hand_made_bodies import cubes, lopsided
from scipy.sparse.linalg import spsolve

from volmap.kernels.observations import Observations
from volmap.kernels.ties import Ties, no_ties
from volmap.mapping.multigrid import Multigrid, coarse_matrix, conjugate_gradients, lattice_weights
from volmap.mapping.objective import Objective
from volmap.types import TetMesh

AFFINE = np.array([[1.2, 0.1, 0.0], [0.0, 0.9, 0.2], [0.1, 0.0, 1.1]])


def pinned(points, strength):
    """Every point held where it is."""
    n = len(points)
    corners, weights = np.zeros((n, 4), np.int64), np.zeros((n, 4))
    corners[:, 0], weights[:, 0] = np.arange(n), 1.0
    normals = np.tile((1.0, 0, 0), (n, 1))
    return Observations(
        corners, weights, np.full((n, 6), -1), points, normals, np.full(n, strength / n), np.ones(n)
    )


def system(mesh: TetMesh, strength=1.0):
    """A Newton matrix at a bent place, and the objective that made it."""
    points = np.array(mesh.points)
    images = points + 0.05 * np.sin(points[:, [1, 2, 0]])
    objective = Objective(points, np.array(mesh.tets), energy="soft-tissue")
    objective.differentiate(images, pinned(points, strength))
    return objective


@pytest.mark.parametrize("spacing_mm", [0.7, 2.0, 5.0])
def test_a_lattice_carries_every_affine_motion(spacing_mm):
    """Closed form: linear functions are interpolated exactly, up to the weights left out."""
    points = np.random.default_rng(0).uniform(-4, 6, (500, 3))
    weights, nodes = lattice_weights(points, spacing_mm)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, rtol=1e-6)
    np.testing.assert_allclose(weights @ (nodes @ AFFINE.T), points @ AFFINE.T, atol=5e-3 * spacing_mm)
    assert weights.getnnz(axis=1).max() <= 4
    assert weights.getnnz(axis=0).min() >= 1


@pytest.mark.parametrize("body", [lopsided(), cubes(np.ones((14, 9, 7), int))])
def test_solutions_against_sparse_lu(body):
    objective = system(body)
    right = np.random.default_rng(1).normal(size=objective.gradient.shape)
    grid = Multigrid(np.array(body.points), 1.0)
    found, iterations = grid.solve(objective.matrix, no_ties(), right, tolerance=1e-10, most=200)
    truth = spsolve(objective.matrix.astype(np.float64).tocsc(), right.ravel()).reshape(-1, 3)
    np.testing.assert_allclose(found, truth, atol=1e-6 * np.abs(truth).max())
    assert iterations < 60


def test_ties_are_part_of_the_matrix():
    body = cubes(np.ones((6, 5, 4), int))
    objective = system(body)
    n = len(body.points)
    tie = Ties(
        np.array([[0, 9, 40, 90]]), np.array([[1.0, -0.5, -0.2, -0.3]]), np.eye(3)[:1], np.array([4.0])
    )
    row = np.zeros((n, 3))
    row[tie.corners[0], 0] = tie.weights[0]
    dense = objective.matrix.toarray().astype(np.float64) + 4.0 * np.outer(row, row)
    right = np.random.default_rng(2).normal(size=(n, 3))
    found, _ = Multigrid(np.array(body.points), 1.0).solve(
        objective.matrix, tie, right, tolerance=1e-10, most=300
    )
    truth = np.linalg.solve(dense, right.ravel()).reshape(n, 3)
    np.testing.assert_allclose(found, truth, atol=1e-6 * np.abs(truth).max())


def test_iterations_hardly_grow_with_the_mesh():
    """Rate: eight times the tets, at most a third more iterations; block Jacobi alone needs far more."""
    counts, alone = [], []
    for k in (10, 20):
        body = cubes(np.ones((k, k, k), int))
        points = np.array(body.points) * (20.0 / k)
        scaled = TetMesh(points, body.tets, body.labels)
        objective = system(scaled, strength=0.01)
        right = np.ascontiguousarray(points * (1.0, 0.2, 0.1))
        right -= right.mean(axis=0)
        _, iterations = Multigrid(points, 1.2 * 20.0 / k).solve(
            objective.matrix, no_ties(), right, tolerance=1e-6, most=400
        )
        counts.append(iterations)
        inverse = np.linalg.inv(objective.matrix.data[objective.pattern.own_slot].astype(np.float64))
        _, plain = conjugate_gradients(
            lambda x, m=objective.matrix: (m @ x.ravel()).reshape(-1, 3),
            lambda r, i=inverse: np.einsum("nij,nj->ni", i, r),
            right,
            tolerance=1e-6,
            most=1000,
        )
        alone.append(plain)
    assert counts[1] <= 1.34 * counts[0] + 1
    assert alone[1] > 2 * counts[1]


def test_a_coarse_matrix_in_strips_is_the_whole_product():
    """Independent library: NumPy's dense products; law: the strip's size does not enter, to the last bit."""
    objective = system(cubes(np.ones((14, 9, 7), int)))
    transfer = objective.multigrid._blockwise[0]
    dense = transfer.toarray().astype(float)
    whole = coarse_matrix(objective.matrix, transfer, strip=10**6)
    expected = dense.T @ objective.matrix.toarray().astype(float) @ dense
    assert np.abs(whole.toarray() - expected).max() < 1e-5 * np.abs(expected).max()
    for strip in (7, 20):
        part = coarse_matrix(objective.matrix, transfer, strip=strip)
        assert whole.shape[0] > 3 * strip
        assert all(
            np.array_equal(getattr(whole, name), getattr(part, name))
            for name in ("data", "indices", "indptr")
        )
