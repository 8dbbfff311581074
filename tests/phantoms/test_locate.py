"""Point location against a search through every tet."""

import numpy as np
from skfem import MeshTet
from volmap_phantoms.locate import TetLocator


def test_agrees_with_a_search_through_every_tet():
    # slow twin: barycentric coordinates in all tets of a bent mesh
    mesh = MeshTet.init_tensor(*(np.linspace(0, 1, 4) for _ in range(3)))
    points = mesh.p.T.copy()
    points[:, 0] += 0.4 * points[:, 2] ** 2
    tets = mesh.t.T.astype(np.int64)
    query = np.random.default_rng(0).uniform(-0.2, 1.6, (3000, 3))
    tet, weights = TetLocator(points, tets).find(query)
    corners = points[tets]
    inverse = np.linalg.inv(np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2))
    local = np.einsum("mij,nmj->nmi", inverse, query[:, None] - corners[None, :, 0])
    within = (local.min(axis=2) >= 0) & (local.sum(axis=2) <= 1)
    assert np.array_equal(tet >= 0, within.any(axis=1))
    found = np.flatnonzero(tet >= 0)
    assert 300 < len(found) < 2900
    assert within[found, tet[found]].all()
    assert np.allclose(np.einsum("nc,nci->ni", weights[found], corners[tet[found]]), query[found], atol=1e-12)


def test_points_nowhere_are_outside():
    mesh = MeshTet.init_tensor(*(np.linspace(0, 1, 2) for _ in range(3)))
    query = np.array([[np.nan, 0, 0], [5.0, 5, 5], [-1e-3, 0.5, 0.5], [0.5, 0.5, 0.5]])
    tet, weights = TetLocator(np.ascontiguousarray(mesh.p.T), mesh.t.T.astype(np.int64)).find(query)
    assert (tet >= 0).tolist() == [False, False, False, True]
    assert np.isnan(weights[:3]).all()
