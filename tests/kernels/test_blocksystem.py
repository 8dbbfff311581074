"""Block system and pulls: against dense matrices and finite differences."""

import numpy as np
import pytest
from skfem import MeshTet

from volmap.kernels import blocksystem, observations
from volmap.kernels.tets import EDGES
from volmap.kernels.ties import Ties, no_ties


@pytest.fixture
def mesh():
    m = MeshTet.init_tensor(*(np.linspace(0, 1, k) for k in (3, 4, 3)))
    rng = np.random.default_rng(0)
    tets = m.t.T.astype(np.int64)
    order = rng.permutation(len(m.p.T))  # numbers of points without any order
    return m.p.T[np.argsort(order)].copy(), np.ascontiguousarray(order[tets])


def random_parts(tets, seed):
    """Per tet a random symmetric 12x12 matrix whose block rows sum to zero, as six blocks; and forces."""
    rng = np.random.default_rng(seed)
    blocks = np.empty((len(tets), 6, 3, 3))
    for t in range(len(tets)):
        b = rng.normal(size=(20, 4, 3))
        b -= b.mean(axis=1, keepdims=True)
        full = np.einsum("kai,kbj->aibj", b, b)
        for e, (i, j) in enumerate(EDGES):
            blocks[t, e] = full[i, :, j, :]
    return rng.normal(size=(len(tets), 4, 3)), blocks


def dense_twin(n, tets, blocks):
    """Slow twin: scatter every tet's blocks into a dense matrix."""
    a = np.zeros((n, 3, n, 3))
    for t, tet in enumerate(tets):
        for e, (i, j) in enumerate(EDGES):
            p, q, k = tet[i], tet[j], blocks[t, e]
            a[p, :, q, :] += k
            a[q, :, p, :] += k.T
            a[p, :, p, :] -= k
            a[q, :, q, :] -= k.T
    return a.reshape(3 * n, 3 * n)


def dense_of(pattern, diagonal, off_diagonal):
    n = len(diagonal)
    a = np.zeros((n, 3, n, 3))
    for p in range(n):
        a[p, :, p, :] = diagonal[p]
    for (p, q), k in zip(pattern.edges, off_diagonal, strict=True):
        a[p, :, q, :], a[q, :, p, :] = k, k.T
    return a.reshape(3 * n, 3 * n)


def empty_system(n, pattern):
    return np.zeros((n, 3)), np.zeros((n, 3, 3)), np.zeros((len(pattern.edges), 3, 3))


def test_gather_equals_scatter(mesh):
    points, tets = mesh
    n = len(points)
    forces, blocks = random_parts(tets, seed=1)
    pattern = blocksystem.pattern_of(tets, n)
    gradient, diagonal, off_diagonal = empty_system(n, pattern)
    blocksystem.gather(pattern, forces, blocks, gradient, diagonal, off_diagonal)
    expected = np.zeros((n, 3))
    np.add.at(expected, tets, forces)
    np.testing.assert_allclose(gradient, expected, atol=1e-12)
    np.testing.assert_allclose(
        dense_of(pattern, diagonal, off_diagonal), dense_twin(n, tets, blocks), atol=1e-10
    )


def test_product_and_solve_against_dense(mesh):
    points, tets = mesh
    n = len(points)
    forces, blocks = random_parts(tets, seed=2)
    pattern = blocksystem.pattern_of(tets, n)
    gradient, diagonal, off_diagonal = empty_system(n, pattern)
    blocksystem.gather(pattern, forces, blocks, gradient, diagonal, off_diagonal)
    diagonal += 0.5 * np.eye(3)
    a = dense_of(pattern, diagonal, off_diagonal)
    x = np.random.default_rng(3).normal(size=(n, 3))
    out = np.empty((n, 3))
    blocksystem.multiply(pattern, diagonal, off_diagonal, x, out)
    np.testing.assert_allclose(out.ravel(), a @ x.ravel(), atol=1e-10)
    found = np.empty((n, 3))
    steps = blocksystem.solve(pattern, diagonal, off_diagonal, no_ties(), out, 1e-12, 3 * n, found)
    assert 0 < steps < 3 * n
    np.testing.assert_allclose(found, np.linalg.solve(a, out.ravel()).reshape(n, 3), atol=1e-8)
    tie = Ties(np.array([[0, 9, 4, 2]]), np.array([[1.0, -0.5, -0.2, -0.3]]), np.eye(3)[:1], np.array([40.0]))
    row = np.zeros((n, 3))
    row[tie.corners[0], 0] = tie.weights[0]
    tied = a + 40.0 * np.outer(row, row)
    blocksystem.solve(pattern, diagonal, off_diagonal, tie, out, 1e-12, 3 * n, found)
    np.testing.assert_allclose(found, np.linalg.solve(tied, out.ravel()).reshape(n, 3), atol=1e-8)


def random_observations(tets, pattern, seed):
    rng = np.random.default_rng(seed)
    chosen = rng.integers(0, len(tets), 15)
    weights = rng.dirichlet(np.ones(4), 15)
    weights[:5] = (1.0, 0, 0, 0)
    weights[5:10, 3] = 0.0
    normals = rng.normal(size=(15, 3))
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    return observations.Observations(
        tets[chosen],
        weights,
        pattern.edge_of_tet[chosen],
        rng.normal(size=(15, 3)),
        normals,
        rng.uniform(0.5, 2, 15),
        rng.choice([0.05, 1.0], 15),
    )


def test_pulls_against_finite_differences(mesh):
    points, tets = mesh
    n = len(points)
    pattern = blocksystem.pattern_of(tets, n)
    o = random_observations(tets, pattern, seed=4)
    gradient, diagonal, off_diagonal = empty_system(n, pattern)
    value = observations.add_pull(o, points, gradient, diagonal, off_diagonal)
    assert value == pytest.approx(observations.misfit(o, points))
    a = dense_of(pattern, diagonal, off_diagonal)
    step = 1e-4
    for column in range(0, 3 * n, 5):
        shifted = []
        for sign in (1, -1):
            x = points.copy()
            x.ravel()[column] += sign * step
            g, d, f = empty_system(n, pattern)
            shifted.append((observations.add_pull(o, x, g, d, f), g))
        assert (shifted[0][0] - shifted[1][0]) / (2 * step) == pytest.approx(
            gradient.ravel()[column], abs=1e-8
        )
        np.testing.assert_allclose(
            (shifted[0][1] - shifted[1][1]).ravel() / (2 * step), a[:, column], atol=1e-8
        )
