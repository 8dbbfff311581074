"""Reading a given surface map off at the points of another surface: closed forms on planes and boxes."""

import numpy as np

from volmap.kernels.surface_map import read_off, rim_edges

AFFINE = np.array([[1.2, 0.3, 0.0], [-0.1, 0.9, 0.2], [0.0, 0.1, 1.1]])


def sheet(n, size, z=0.0, turned=False):
    """A flat square of n x n cells in the plane at height z, two triangles a cell."""
    x = np.linspace(0, size, n + 1)
    points = np.stack([*np.meshgrid(x, x, indexing="ij"), np.full((n + 1, n + 1), z)], axis=-1).reshape(-1, 3)
    index = np.arange((n + 1) ** 2).reshape(n + 1, n + 1)
    a, b, c, d = (
        index[:-1, :-1].ravel(),
        index[1:, :-1].ravel(),
        index[1:, 1:].ravel(),
        index[:-1, 1:].ravel(),
    )
    triangles = np.concatenate([np.stack([a, b, c], axis=1), np.stack([a, c, d], axis=1)])
    return points, triangles[:, ::-1] if turned else triangles


def test_an_affine_surface_map_is_read_off_exactly_whichever_way_it_is_turned():
    """Closed form: linear in each triangle reproduces affine maps, at the foot of each point."""
    points, triangles = sheet(7, 10.0, z=0.4)
    for turned in (False, True):
        given, faces = sheet(4, 10.0, turned=turned)
        found = read_off(
            points, triangles, np.ones(len(triangles), bool), given, faces, given @ AFFINE.T, reach_mm=0.5
        )
        np.testing.assert_array_equal(found.rows, np.arange(64))
        np.testing.assert_allclose(found.gap_mm, 0.4, atol=1e-12)
        np.testing.assert_allclose(found.anchors, (points - (0, 0, 0.4)) @ AFFINE.T, atol=1e-12)
        assert found.covered.all()
        np.testing.assert_allclose(found.area.sum(), 100.0)


def test_nothing_is_said_beyond_the_reach_or_the_rim():
    """A surface over the half x < 5: points more than a sixth of the reach beyond its rim are left."""
    points, triangles = sheet(10, 10.0)
    given, faces = sheet(5, 5.0)
    given = given * (1, 2, 1)
    found = read_off(points, triangles, np.ones(len(triangles), bool), given, faces, given, reach_mm=3.0)
    assert points[found.rows, 0].max() == 5.0
    assert found.covered.sum() == 100  # of 200
    far = read_off(
        np.add(points, (0, 0, 3.1)), triangles, np.ones(200, bool), given, faces, given, reach_mm=3.0
    )
    assert not len(far.rows)


def test_an_inner_surface_close_under_the_outer_one_is_not_drawn_onto_it():
    """Two sheets 1 mm apart, the given surface lies on the outer one: the inner one is not spoken of."""
    outer, faces = sheet(6, 6.0, z=1.0)
    inner, _ = sheet(6, 6.0)
    points = np.concatenate([outer, inner])
    triangles = np.concatenate([faces, faces + len(outer)])
    which = np.arange(len(triangles)) < len(faces)
    found = read_off(points, triangles, which, outer, faces, outer, reach_mm=2.0)
    np.testing.assert_array_equal(found.rows, np.arange(len(outer)))
    both = read_off(points, triangles, which, points, triangles, points, reach_mm=2.0)
    np.testing.assert_array_equal(both.rows, np.arange(len(points)))
    np.testing.assert_allclose(both.anchors, points, atol=1e-12)


def test_a_rim_is_told_by_place():
    """Counted by hand: a square of 2 x 2 cells has 8 rim edges, also when no two triangles share points."""
    points, triangles = sheet(2, 2.0)
    assert rim_edges(points, triangles).sum() == 8
    assert rim_edges(points[triangles].reshape(-1, 3), np.arange(24).reshape(-1, 3)).sum() == 8
