"""The gradient of the map at moved points, and values carried there, through one map and through a chain."""

import numba
import numpy as np
import pytest

from volmap.carry import apply_rule, carried_values, gradients_at, move_points
from volmap.types import MapChain, Rule, VolumeMap

TURN = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])


@pytest.fixture(scope="module")
def sheared(known) -> VolumeMap:
    return known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)


@pytest.fixture(scope="module")
def chain(known, sheared) -> MapChain:
    mesh = known.box(6, -3, 3)
    rule = known.twist(np.array(mesh.points), 0.2)
    return MapChain((sheared, VolumeMap(mesh, rule, "target", "later")))


@pytest.mark.parametrize("kind", ["map", "chain"])
def test_gradients_are_differences_of_moved_points(sheared, chain, kind):
    """Slow twin: differences of the moved points themselves over 1e-6 mm, away from faces of tets."""
    volume_map = sheared if kind == "map" else chain
    points = np.random.default_rng(0).uniform(-0.69, 0.69, (400, 3))
    moved = move_points(volume_map, points)
    gradients = gradients_at(volume_map, moved)
    step = 1e-6
    columns, inner = [], np.ones(len(points), bool)
    for axis in np.eye(3):
        ahead, behind = (move_points(volume_map, points + s * step * axis) for s in (1, -1))
        inner &= (ahead.tets == moved.tets).all(axis=0) & (behind.tets == moved.tets).all(axis=0)
        columns.append((ahead.points - behind.points) / (2 * step))
    assert inner.mean() > 0.99
    np.testing.assert_allclose(gradients[inner], np.stack(columns, axis=2)[inner], atol=1e-8)


def test_a_shared_face_belongs_to_one_tet_and_moves_as_one(sheared):
    """Across a face the gradients differ along its normal only, so both tets send it to one place."""
    mesh = sheared.mesh
    corner = mesh.points[mesh.tets[:, :3]].mean(axis=1)
    moved = move_points(sheared, corner)
    own = sheared.images[mesh.tets[:, :3]].mean(axis=1)
    np.testing.assert_allclose(moved.points, own, atol=1e-13)
    assert (moved.tets[0] != np.arange(len(mesh.tets))).any()  # the neighbour had it
    np.testing.assert_array_equal(gradients_at(sheared, moved), sheared.gradients[moved.tets[0]])


@pytest.mark.parametrize("rule", ["density", "line", "turn", "gradient", "flux"])
def test_through_a_chain_the_whole_gradient_counts(sheared, chain, rule):
    """Values through a chain are those of the product of its gradients; lost points have none."""
    points = np.random.default_rng(1).uniform(-0.72, 0.72, (300, 3))
    shape = () if rule == "density" else (3,)
    values = np.random.default_rng(2).normal(size=(300, *shape))
    moved = move_points(chain, points)
    carried = carried_values(rule, values, chain, moved)
    lost = ~moved.carried
    assert 0 < lost.sum() < 100
    assert np.isnan(carried[lost]).all()
    second = chain.maps[1].gradients[moved.tets[1, ~lost]]
    first = sheared.gradients[moved.tets[0, ~lost]]
    expected = apply_rule(rule, values[~lost], second @ first)
    np.testing.assert_allclose(carried[~lost], expected, atol=1e-12)


def test_a_value_is_kept_where_its_point_was_carried(sheared):
    points = np.array([[0.1, 0.2, 0.3], [5.0, 0, 0]])
    moved = move_points(sheared, points)
    np.testing.assert_array_equal(
        carried_values(Rule.VALUE, np.array([7.0, 8.0]), sheared, moved), [7, np.nan]
    )


def test_mass_of_a_body_is_kept(sheared):
    """Law: density times volume, summed over the tets, is the same before and after."""
    mesh = sheared.mesh
    centres = mesh.points[mesh.tets].mean(axis=1)
    density = 1 + centres[:, 0] ** 2
    there = carried_values("density", density, sheared, move_points(sheared, centres))
    assert (there * sheared.image_mesh.volumes).sum() == pytest.approx((density * mesh.volumes).sum())
    back = carried_values(
        "density",
        there,
        sheared.reversed(),
        move_points(sheared.reversed(), sheared.images[mesh.tets].mean(1)),
    )
    np.testing.assert_allclose(back, density, rtol=1e-12)


@pytest.mark.parametrize("rule", ["density", "turn", "flux"])
def test_threads_change_no_bit(sheared, rule):
    """Law: the same bytes whatever the number of threads, and however many are asked for at once."""
    n = 40_000
    points = np.random.default_rng(6).uniform(-0.75, 0.75, (n, 3))
    values = np.random.default_rng(7).normal(size=(n, *(() if rule == "density" else (3,))))
    found = []
    threads = numba.get_num_threads()
    try:
        for count in (1, numba.config.NUMBA_NUM_THREADS):
            numba.set_num_threads(count)
            moved = move_points(sheared, points)
            found.append((moved.points, carried_values(rule, values, sheared, moved)))
    finally:
        numba.set_num_threads(threads)
    some = move_points(sheared, points[20_000:20_777])
    found.append((some.points, carried_values(rule, values[20_000:20_777], sheared, some)))
    for one, more in zip(found[0], found[1], strict=True):
        assert one.tobytes() == more.tobytes()
    for one, few in zip(found[0], found[2], strict=True):
        assert one[20_000:20_777].tobytes() == few.tobytes()
