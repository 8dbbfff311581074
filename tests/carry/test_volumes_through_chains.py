"""Volumes through several maps: the composition is known, and every voxel can be checked alone."""

import numpy as np
import pytest

from volmap.carry import CarrySettings, carry, move_points
from volmap.types import (
    Grid,
    ImageVolume,
    InputError,
    LabelVolume,
    MapChain,
    Rule,
    Rules,
    VectorVolume,
    VolumeMap,
)

A = np.array([[1.1, 0.2, 0], [-0.1, 0.9, 0.15], [0.1, 0, 1.05]])
B = np.array([[0.9, 0, 0.1], [0.15, 1.1, 0], [0, -0.1, 1.0]])


def grid_of(n, spacing, origin) -> Grid:
    affine = np.diag([spacing, spacing, spacing, 1.0])
    affine[:3, 3] = origin
    return Grid((n, n, n), affine)


def chain_of(known, *, shrink=1.0) -> MapChain:
    """y = B A x; the second body has other tets, and with `shrink` is a little smaller."""
    first = known.mapped(known.box(3, -4, 4), lambda x: x @ A.T)
    body = known.box(4, -4 * shrink, 4 * shrink)
    second = VolumeMap(body.moved(body.points @ A.T), body.points @ A.T @ B.T)
    return MapChain(
        (VolumeMap(first.mesh, first.images, "a", "b"), VolumeMap(second.mesh, second.images, "b", "c"))
    )


HERE, THERE = grid_of(21, 0.5, -5.0), grid_of(28, 0.4, -5.4)


def centres(grid):
    return grid.to_world(np.indices(grid.shape).reshape(3, -1).T.astype(float)).reshape(*grid.shape, 3)


@pytest.mark.parametrize("reverse", [False, True])
def test_a_linear_image_goes_through_two_affine_maps_exactly(known, reverse):
    """Closed form: intensity c.x pulled through y = B A x is c.(B A)^-1 y; with reverse c.(B A) y."""
    both = np.linalg.inv(B @ A) if not reverse else B @ A
    image = ImageVolume(HERE if not reverse else grid_of(35, 0.4, -6.8), _slope(reverse))
    carried = carry(image, chain_of(known), reverse=reverse, onto=THERE).thing.values
    inside = ~np.isnan(carried)
    assert 2000 < inside.sum() < inside.size
    np.testing.assert_allclose(carried[inside], (centres(THERE) @ both.T @ [1, 10, 100.0])[inside], atol=2e-4)


def _slope(reverse):
    return centres(HERE if not reverse else grid_of(35, 0.4, -6.8)) @ [1, 10, 100.0]


@pytest.mark.parametrize(("rule", "matrix"), [(Rule.LINE, B @ A), (Rule.GRADIENT, np.linalg.inv(B @ A).T)])
def test_vectors_follow_the_gradient_of_the_whole_way(known, rule, matrix):
    """Closed form: F of the way is B A."""
    vectors = VectorVolume(HERE, np.broadcast_to([0.3, -1, 0.7], (*HERE.shape, 3)))
    carried = carry(
        vectors, chain_of(known), onto=THERE, settings=CarrySettings(rules=Rules(rule))
    ).thing.values
    inside = ~np.isnan(carried[..., 0])
    assert inside.sum() > 2000
    expected = np.broadcast_to(matrix @ [0.3, -1, 0.7], (inside.sum(), 3))
    np.testing.assert_allclose(carried[inside], expected, atol=1e-6)


def test_every_voxel_comes_from_where_points_say(known):
    """Law: a voxel's label is that of the voxel its centre goes back to, through bent maps as well."""
    first = known.mapped(known.jittered(known.box(3, -4, 4), 0.2), lambda x: known.twist(x, 0.15))
    second = VolumeMap(first.image_mesh, known.twist(first.images[:, [1, 2, 0]], 0.1)[:, [2, 0, 1]])
    chain = MapChain(
        (VolumeMap(first.mesh, first.images, "a", "b"), VolumeMap(second.mesh, second.images, "b", "c"))
    )
    labels = LabelVolume(HERE, np.random.default_rng(0).integers(1, 9, HERE.shape).astype(np.uint16))
    carried = carry(labels, chain, onto=THERE).thing.labels
    home = move_points(chain.reversed(), centres(THERE).reshape(-1, 3))
    index = HERE.to_index(home.points[home.carried])
    sure = np.abs(index - np.floor(index) - 0.5).min(axis=1) > 1e-6  # not half-way between two voxels
    nearest = labels.labels[tuple(np.rint(index).astype(int).T)]
    np.testing.assert_array_equal(carried.ravel()[home.carried][sure], nearest[sure])
    assert not carried.ravel()[~home.carried].any()


def test_where_the_bodies_on_the_way_differ_is_told(known):
    """Closed form: 17^3 voxel centres in a body of +-4 mm, 15^3 of them in one of +-3.88 mm on the way."""
    chain = chain_of(known, shrink=0.97)
    labels = LabelVolume(THERE, np.ones(THERE.shape, np.uint16))
    for reach_mm, code, n_carried in ((0.01, "outside-left-out", 15**3), (0.5, "outside-carried", 17**3)):
        settings = CarrySettings(reach_mm=reach_mm)
        carried = carry(labels, chain, reverse=True, onto=HERE, settings=settings)
        assert np.count_nonzero(carried.thing.labels) == n_carried
        told = [f for f in carried.findings if "on the way" in f.sentence]
        assert [f.code for f in told] == [code]
        assert str(17**3 - 15**3) in told[0].sentence
    there = carry(LabelVolume(HERE, np.ones(HERE.shape, np.uint16)), chain, onto=THERE)
    assert not any("on the way" in f.sentence for f in there.findings)


def test_exact_shares_go_through_one_map_at_a_time(known):
    labels = LabelVolume(HERE, np.ones(HERE.shape, np.uint16))
    with pytest.raises(InputError, match="one map at a time"):
        carry(labels, chain_of(known), onto=THERE, settings=CarrySettings(labels="shares"))
