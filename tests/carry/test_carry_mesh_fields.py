"""Meshes with data through a map: points exactly, data by their rules, labels kept."""

import numpy as np
import pytest

from volmap.carry import carry, gradients_at, move_points
from volmap.types import InputError, MapChain, MeshFields, Quantity, Rule, VolumeMap

AFFINE = np.array([[1.5, 0.4, 0.0], [0.0, 0.8, 0.1], [0.2, 0.0, 1.2]])


def data(n: int, seed: int) -> tuple[Quantity, ...]:
    random = np.random.default_rng(seed)
    T = random.normal(size=(n, 3, 3))
    return (
        Quantity("heat", "", random.normal(size=n), Rule.VALUE),
        Quantity("dose", "", random.normal(size=n), Rule.DENSITY),
        Quantity("v", "", random.normal(size=(n, 3)), Rule.LINE),
        Quantity("T", "", T + T.swapaxes(1, 2), Rule.FLUX),
    )


@pytest.fixture(scope="module")
def fields(known) -> MeshFields:
    mesh = known.jittered(known.box(3, -0.5, 0.5), 0.1, seed=4)
    n, m = len(mesh.points), len(mesh.tets)
    return MeshFields(mesh, data(n, 0), data(m, 1), {"node": np.arange(n)}, {"part": np.arange(m) % 3})


def test_affine_rules_at_points_and_cells(known, fields):
    """Closed forms of an affine map, written out here."""
    volume_map = known.mapped(known.box(4, -1, 1), lambda x: x @ AFFINE.T)
    carried = carry(fields, volume_map)
    assert not carried.findings
    J = np.linalg.det(AFFINE)
    np.testing.assert_allclose(carried.thing.points, fields.points @ AFFINE.T, atol=1e-12)
    for before, after in (
        (fields.at_points, carried.thing.at_points),
        (fields.at_cells, carried.thing.at_cells),
    ):
        heat, dose, v, T = (q.values for q in before)
        expected = [heat, dose / J, v @ AFFINE.T, AFFINE @ T @ AFFINE.T / J]
        for quantity, values in zip(after, expected, strict=True):
            np.testing.assert_allclose(quantity.values, values, atol=1e-12, err_msg=quantity.name)
    np.testing.assert_array_equal(carried.thing.kept_at_points["node"], np.arange(len(fields.points)))
    np.testing.assert_array_equal(carried.thing.kept_at_cells["part"], fields.kept_at_cells["part"])
    assert [q["name"] for q in carried.facts["quantities"]] == ["heat", "dose", "v", "T"] * 2


def test_a_bent_map_and_back(known, fields):
    """Cells take F at their middle; on the map's own mesh that is the tet's own F and back is nothing."""
    volume_map = known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)
    mesh = volume_map.mesh
    own = MeshFields(mesh, at_cells=data(len(mesh.tets), 3))
    there = carry(own, volume_map).thing
    F = volume_map.gradients
    np.testing.assert_allclose(
        there.at_cells[2].values, (F @ own.at_cells[2].values[..., None])[..., 0], atol=1e-12
    )
    np.testing.assert_allclose(
        there.at_cells[1].values, own.at_cells[1].values / volume_map.volume_ratio, rtol=1e-12
    )
    back = carry(there, volume_map, reverse=True).thing
    for quantity, again in zip(own.at_cells, back.at_cells, strict=True):
        np.testing.assert_allclose(again.values, quantity.values, atol=1e-10)
    carried = carry(fields, volume_map).thing
    F = gradients_at(volume_map, move_points(volume_map, fields.points))
    v = fields.at_points[2].values
    np.testing.assert_allclose(carried.at_points[2].values, (F @ v[..., None])[..., 0], atol=1e-12)


def test_surfaces_with_data_through_a_chain(known, fields):
    """Through two affine maps the product counts."""
    first = known.mapped(known.box(4, -1, 1), lambda x: x @ AFFINE.T)
    mesh = known.box(3, -3, 3)
    second = VolumeMap(mesh, mesh.points @ AFFINE, "target", "later")
    surface = fields.body.interfaces
    thing = MeshFields(surface, at_cells=data(len(surface.triangles), 5))
    carried = carry(thing, MapChain((first, second))).thing
    whole = AFFINE.T @ AFFINE
    np.testing.assert_allclose(carried.points, surface.points @ whole.T, atol=1e-12)
    np.testing.assert_allclose(carried.at_cells[2].values, thing.at_cells[2].values @ whole.T, atol=1e-12)
    np.testing.assert_array_equal(carried.body.sides, surface.sides)


def test_arrays_that_do_not_fit(known, fields):
    mesh = fields.body
    with pytest.raises(InputError, match="node: an array does not fit the mesh"):
        MeshFields(mesh, kept_at_points={"node": np.arange(3)})
    with pytest.raises(InputError, match="same name"):
        MeshFields(mesh, data(len(mesh.points), 0), kept_at_points={"heat": np.arange(len(mesh.points))})
