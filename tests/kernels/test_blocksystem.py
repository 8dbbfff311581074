"""Block system and pulls: against dense matrices and finite differences."""

import numpy as np
import pytest
from scipy.sparse import bsr_matrix
from skfem import MeshTet

from volmap.kernels import blocksystem, observations
from volmap.kernels.tets import EDGES


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
    return rng.normal(size=(len(tets), 4, 3)), blocks.astype(np.float32)


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


def dense_of(pattern, rows):
    """Independent library: the same arrays read as SciPy's block rows."""
    n = len(pattern.own_slot)
    matrix = bsr_matrix((rows, pattern.row_column, pattern.row_start), shape=(3 * n, 3 * n))
    return matrix.toarray().astype(np.float64)


def empty_system(n, pattern):
    return np.zeros((n, 3)), np.zeros((len(pattern.row_column), 3, 3), np.float32)


def test_gather_equals_scatter(mesh):
    points, tets = mesh
    n = len(points)
    forces, blocks = random_parts(tets, seed=1)
    pattern = blocksystem.pattern_of(tets, n)
    gradient, rows = empty_system(n, pattern)
    blocksystem.gather(pattern, forces, blocks, gradient, rows)
    expected = np.zeros((n, 3))
    np.add.at(expected, tets, forces)
    np.testing.assert_allclose(gradient, expected, atol=1e-12)
    twin = dense_twin(n, tets, blocks)
    np.testing.assert_allclose(dense_of(pattern, rows), twin, atol=1e-6 * np.abs(twin).max())


def test_a_product_against_dense(mesh):
    points, tets = mesh
    n = len(points)
    forces, blocks = random_parts(tets, seed=2)
    pattern = blocksystem.pattern_of(tets, n)
    gradient, rows = empty_system(n, pattern)
    blocksystem.gather(pattern, forces, blocks, gradient, rows)
    x = np.random.default_rng(3).normal(size=(n, 3))
    out = np.empty((n, 3))
    blocksystem.multiply(pattern.row_start, pattern.row_column, rows, x, out)
    np.testing.assert_allclose(out.ravel(), dense_of(pattern, rows) @ x.ravel(), atol=1e-10)


def test_a_shift_of_all_points_costs_nothing(mesh):
    points, tets = mesh
    forces, blocks = random_parts(tets, seed=2)
    pattern = blocksystem.pattern_of(tets, len(points))
    gradient, rows = empty_system(len(points), pattern)
    blocksystem.gather(pattern, forces, blocks, gradient, rows)
    out = np.empty((len(points), 3))
    blocksystem.multiply(pattern.row_start, pattern.row_column, rows, np.ones_like(out), out)
    assert np.abs(out).max() < 1e-5 * np.abs(rows).max()


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
        pattern.edge_of_tet[chosen].astype(np.int64),
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
    gradient, rows = empty_system(n, pattern)
    value = observations.add_pull(o, points, pattern, gradient, rows)
    assert value == pytest.approx(observations.misfit(o, points))
    a = dense_of(pattern, rows)
    step = 1e-4
    for column in range(0, 3 * n, 5):
        shifted = []
        for sign in (1, -1):
            x = points.copy()
            x.ravel()[column] += sign * step
            g, r = empty_system(n, pattern)
            shifted.append((observations.add_pull(o, x, pattern, g, r), g))
        assert (shifted[0][0] - shifted[1][0]) / (2 * step) == pytest.approx(
            gradient.ravel()[column], abs=1e-8
        )
        np.testing.assert_allclose(
            (shifted[0][1] - shifted[1][1]).ravel() / (2 * step), a[:, column], atol=1e-6
        )
