"""Point location and rasterising against linear algebra, VTK and closed-form counts."""

import numba
import numpy as np
import pytest

from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.rasterise import tets_on_grid, values_on_grid


def _slow_coordinates(points, tets, query):
    """Slow twin: one linear solve a tet, by LAPACK."""
    system = np.concatenate([points[tets].swapaxes(1, 2), np.ones((len(tets), 1, 4))], axis=1)
    return np.linalg.solve(system, np.append(query, 1.0)[None, :, None])[..., 0]


def test_every_point_matches_the_slow_twin(known):
    mesh = known.jittered(known.box((4, 5, 3), -1, 2), 0.2)
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    queries = np.random.default_rng(1).uniform(-1.3, 2.3, (300, 3))
    tet, weights = locate(build_buckets(points, tets), points, tets, queries)
    for q, query in enumerate(queries):
        coordinates = _slow_coordinates(points, tets, query)
        depth = coordinates.min(axis=1)
        assert (tet[q] >= 0) == (depth.max() >= 0)
        if tet[q] >= 0:
            assert tet[q] == depth.argmax()
            np.testing.assert_allclose(weights[q], coordinates[tet[q]], atol=1e-12)
    assert 50 < (tet < 0).sum() < 250  # both answers were asked for


def test_matches_vtk_cell_locator(known):
    """Independent library: VTK's cell locator, away from its own tolerance (1e-3, measured)."""
    pv = pytest.importorskip("pyvista")
    mesh = known.jittered(known.box(6, 0, 10), 0.2, seed=3)
    grid = pv.UnstructuredGrid({pv.CellType.TETRA: np.array(mesh.tets)}, np.array(mesh.points))
    queries = np.random.default_rng(2).uniform(0.01, 9.99, (2000, 3))
    tet, weights = locate(build_buckets(mesh.points, mesh.tets), mesh.points, mesh.tets, queries)
    clear = weights.min(axis=1) > 2e-3
    assert clear.mean() > 0.95
    np.testing.assert_array_equal(tet[clear], grid.find_containing_cell(queries)[clear])


def test_corners_edges_and_faces_are_found_and_reproduced(known):
    mesh = known.jittered(known.box(5, 0, 1), 0.25)
    corners = mesh.points[mesh.tets]
    places = np.concatenate(
        [mesh.points, corners[:, :2].mean(1), corners[:, :3].mean(1), corners[:, 1:].mean(1)]
    )
    tet, weights = locate(build_buckets(mesh.points, mesh.tets), mesh.points, mesh.tets, places)
    assert (tet >= 0).all()
    np.testing.assert_allclose(interpolate(mesh.tets, mesh.points, tet, weights), places, atol=1e-13)


def test_many_queries_at_once_are_the_same_as_few(known):
    """Many are looked up box after box; the answers, and where there is none, are those of few at a time."""
    mesh = known.jittered(known.box(6, -1, 1), 0.2)
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    queries = np.random.default_rng(5).uniform(-1.1, 1.1, (40_000, 3))
    queries[[7, 8, 9], [0, 1, 2]] = np.nan, np.inf, -1e300
    buckets = build_buckets(points, tets)
    tet, weights = locate(buckets, points, tets, queries)
    for start in range(0, len(queries), 10_000):
        few_tet, few_weights = locate(buckets, points, tets, queries[start : start + 10_000])
        np.testing.assert_array_equal(tet[start : start + 10_000], few_tet)
        np.testing.assert_array_equal(weights[start : start + 10_000], few_weights)
    assert (tet[7:10] == -1).all()
    assert 0.1 < (tet < 0).mean() < 0.5
    height = interpolate(tets, points[:, 2], tet, weights)  # one number a point
    np.testing.assert_allclose(height[tet >= 0], queries[tet >= 0, 2], atol=1e-13)
    assert np.isnan(height[tet < 0]).all()


def test_a_tie_goes_to_the_first_tet_and_threads_change_nothing(known):
    mesh = known.box(4, 0, 4)  # whole-number geometry: coordinates are exact, ties are true ties
    places = np.stack(np.meshgrid(*[np.arange(0, 4.5, 0.5)] * 3, indexing="ij"), -1).reshape(-1, 3)
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    buckets = build_buckets(points, tets)
    tet, weights = locate(buckets, points, tets, places)
    for place, found in zip(places, tet, strict=True):
        depth = np.round(_slow_coordinates(points, tets, place).min(axis=1), 12)
        assert found == np.flatnonzero(depth == depth.max())[0]
    before = numba.get_num_threads()
    try:
        numba.set_num_threads(1)
        again = locate(buckets, points, tets, places)
    finally:
        numba.set_num_threads(before)
    assert tet.tobytes() == again[0].tobytes()
    assert weights.tobytes() == again[1].tobytes()


def test_outside_nan_empty_and_flat_tets():
    points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [1.0, 1, 0]])
    tets = np.array([[0, 1, 2, 4], [0, 1, 2, 3]])  # the first has no volume
    queries = np.array([[0.1, 0.1, 0.0], [2, 2, 2], [np.nan, 0, 0], [-1e-6, 0.2, 0.2]])
    tet, weights = locate(build_buckets(points, tets), points, tets, queries)
    assert tet.tolist() == [1, -1, -1, -1]
    assert np.isnan(weights[1:]).all()
    assert np.isnan(interpolate(tets, points, tet, weights)[1:]).all()
    assert len(locate(build_buckets(points, tets), points, tets, np.empty((0, 3)))[0]) == 0


@pytest.mark.parametrize(("low", "high"), [(2.0, 10.0), (2.5, 9.5), (2.25, 10.0)])
def test_a_box_covers_each_voxel_centre_once(known, low, high):
    """Closed form: the whole numbers in [low, high], cubed; at 2.0 / 10.0 most centres lie on faces."""
    mesh = known.box(4, low, high)
    owner = tets_on_grid(mesh.points, mesh.tets, (13, 12, 14))
    per_axis = int(np.floor(high) - np.ceil(low)) + 1
    assert (owner >= 0).sum() == per_axis**3
    first, last = int(np.ceil(low)), int(np.floor(high)) + 1
    assert (owner[first:last, first:last, first:last] >= 0).all()


def test_rasterising_is_locating_with_the_first_tet_on_ties(known):
    """Slow twin: the first tet, in order, that a linear solve says holds the centre."""
    mesh = known.jittered(known.box(3, -1.3, 6), 0.2)
    shape = (6, 7, 5)
    owner = tets_on_grid(mesh.points, mesh.tets, shape)
    for place in np.ndindex(shape):
        depth = _slow_coordinates(mesh.points, mesh.tets, np.array(place, float)).min(axis=1)
        holds = np.flatnonzero(depth >= -1e-9)
        assert owner[place] == (holds[0] if len(holds) else -1)


def test_rasterised_volume_of_a_rotated_box_converges_and_has_no_holes(known):
    """Law: every centre strictly inside a rotated box (closed form by its own axes) is covered."""
    turn = np.linalg.qr(np.random.default_rng(5).normal(size=(3, 3)))[0]
    mesh = known.box(5, -8, 8)
    mesh = mesh.moved(mesh.points @ turn.T + 16.0)
    owner = tets_on_grid(mesh.points, mesh.tets, (33, 33, 33))
    centres = np.stack(np.meshgrid(*[np.arange(33)] * 3, indexing="ij"), -1)
    reach = np.abs((centres - 16.0) @ turn).max(axis=-1)
    np.testing.assert_array_equal(owner >= 0, reach <= 8.0)


def test_values_on_grid_are_exact_for_a_linear_function(known):
    """Patch test: linear interpolation reproduces linear functions."""
    mesh = known.jittered(known.box(4, -0.4, 9.3), 0.2)
    slope = np.array([[0.5, -1, 2], [3, 0.25, -0.75], [0, 0, 1]])
    owner = tets_on_grid(mesh.points, mesh.tets, (10, 10, 10))
    found = values_on_grid(mesh.points, mesh.tets, mesh.points @ slope.T + 7.0, (10, 10, 10))
    centres = np.stack(np.meshgrid(*[np.arange(10)] * 3, indexing="ij"), -1)
    assert (owner >= 0).all()
    np.testing.assert_allclose(found, centres @ slope.T + 7.0, rtol=3e-7, atol=3e-6)
    outside = tets_on_grid(mesh.points + 5, mesh.tets, (10, 10, 10))
    found = values_on_grid(mesh.points + 5, mesh.tets, mesh.points, (10, 10, 10))
    np.testing.assert_array_equal(np.isnan(found), np.repeat(outside[..., None] < 0, 3, axis=-1))
    assert (outside < 0).any()
