"""Things carried by a sampled field: closed forms of affine maps, the direction trap, what is refused."""

import numpy as np
import pytest

from volmap.carry import CarrySettings, backward_field, carry, carry_by_field, forward_field
from volmap.types import (
    Grid,
    GridField,
    ImageVolume,
    InputError,
    LabelVolume,
    Landmarks,
    Measurements,
    MeshFields,
    Quantity,
    Rule,
    Rules,
    TetMesh,
)

LINEAR = np.array([[1.1, 0.2, 0.0], [-0.1, 0.9, 0.1], [0.0, 0.0, 1.2]])
SHIFT = np.array([3.0, -1.0, 2.0])


def grid(n, spacing, origin):
    affine = np.diag([*np.broadcast_to(spacing, 3), 1.0])
    affine[:3, 3] = origin
    return Grid((n,) * 3, affine)


HERE, THERE = grid(17, 1.25, -10.0), grid(25, [1.3, 1.2, 1.4], [-12.0, -14.0, -13.0])


@pytest.fixture(scope="module")
def volume_map(known):
    return known.mapped(known.jittered(known.box(5, -9, 9), 0.1), lambda x: x @ LINEAR.T + SHIFT)


@pytest.fixture(scope="module")
def forward(volume_map):
    return forward_field(volume_map, HERE)


def marks(points):
    return Landmarks(tuple(f"bead {i}" for i in range(len(points))), np.asarray(points, float))


def test_points_go_where_an_affine_field_says(forward):
    """Closed form: trilinear sampling is exact for affine maps, up to float32."""
    points = np.random.default_rng(0).uniform(-7, 7, (100, 3))
    carried = carry_by_field(marks(points), forward)
    assert carried.findings == ()
    np.testing.assert_allclose(carried.thing.points, points @ LINEAR.T + SHIFT, atol=1e-5)


def test_direction_trap(known):
    """phi(x) = 2x: forward moves 5 to 10, and pulls f(y) = y_x in TARGET to 2x on SOURCE's grid."""
    volume_map = known.mapped(known.box(2, -8, 8), lambda x: 2 * x)
    field = forward_field(volume_map, grid(17, 1.0, -8.0))
    np.testing.assert_allclose(carry_by_field(marks([[5.0, 5, 5]]), field).thing.points, [[10, 10, 10]])
    there = grid(37, 1.0, -18.0)
    ramp = np.broadcast_to(np.arange(-18.0, 19.0)[:, None, None], there.shape).astype(np.float32)
    pulled = carry_by_field(ImageVolume(there, ramp), field).thing
    assert pulled.grid is field.grid
    x = np.arange(-8.0, 9.0)[:, None, None]
    known_voxels = ~np.isnan(pulled.values)
    assert known_voxels.all()
    np.testing.assert_allclose(pulled.values, np.broadcast_to(2 * x, pulled.values.shape), atol=1e-5)


@pytest.mark.parametrize("mode", ["linear", "cubic"])
def test_an_image_is_what_the_map_gives(volume_map, forward, mode):
    """The map itself, from TARGET to SOURCE: the field is sampled at those very voxel centres."""
    image = ImageVolume(THERE, np.random.default_rng(1).normal(size=THERE.shape).astype(np.float32))
    settings = CarrySettings(image=mode)
    by_field = carry_by_field(image, forward, settings=settings).thing.values
    by_map = carry(image, volume_map, reverse=True, onto=HERE, settings=settings).thing.values
    np.testing.assert_array_equal(np.isnan(by_field), np.isnan(by_map))
    np.testing.assert_allclose(by_field, by_map, atol=1e-4)


@pytest.mark.parametrize("mode", ["nearest", "one-hot"])
def test_labels_are_what_the_map_gives(volume_map, forward, mode):
    voxels = np.random.default_rng(2).integers(0, 4, (5, 5, 5)).repeat(5, 0).repeat(5, 1).repeat(5, 2)
    labels = LabelVolume(THERE, voxels.astype(np.uint16), {1: "a"})
    settings = CarrySettings(labels=mode)
    by_field = carry_by_field(labels, forward, settings=settings).thing
    by_map = carry(labels, volume_map, reverse=True, onto=HERE, settings=settings).thing
    assert (by_field.labels != by_map.labels).mean() < 1e-3  # ties of rounding alone
    assert by_field.names == {1: "a"}


def test_points_where_the_field_is_not_defined_are_left_out_and_named(forward):
    carried = carry_by_field(marks([[0.0, 0, 0], [60.0, 0, 0]]), forward)
    assert carried.thing.names == ("bead 0",)
    (finding,) = carried.findings
    assert finding.code == "outside-left-out"
    assert "1 of 2 points" in finding.sentence
    assert "bead 1" in finding.sentence
    with pytest.raises(InputError, match="all 1 points lie where the field is not defined"):
        carry_by_field(marks([[60.0, 0, 0]]), forward)


def test_a_mesh_goes_whole_or_not_at_all(forward):
    corners = np.array([[0.0, 0, 0], [3, 0, 0], [0, 3, 0], [0, 0, 3]])
    mesh = TetMesh(corners, np.array([[0, 1, 2, 3]]), np.array([4]))
    moved = carry_by_field(mesh, forward).thing
    np.testing.assert_allclose(moved.points, corners @ LINEAR.T + SHIFT, atol=1e-5)
    assert moved.labels.tolist() == [4]
    with pytest.raises(InputError, match="1 of 4 points lie where the field is not defined"):
        carry_by_field(mesh.moved(corners * [30, 1, 1]), forward)


def measured(rule):
    quantity = Quantity("dose", "Gy", np.array([1.0, 2.0]), rule)
    return Measurements(("a", "b"), np.array([[0.0, 0, 0], [60.0, 0, 0]]), (quantity,))


def meshed(rule):
    corners = np.array([[0.0, 0, 0], [3, 0, 0], [0, 3, 0], [0, 0, 3]])
    mesh = TetMesh(corners, np.array([[0, 1, 2, 3]]), np.array([4]))
    return MeshFields(mesh, (Quantity("dose", "Gy", np.arange(4.0), rule),))


def test_a_mesh_keeps_the_values_that_are_kept(forward):
    carried = carry_by_field(meshed(Rule.VALUE), forward).thing
    np.testing.assert_allclose(
        carried.body.points, meshed(Rule.VALUE).body.points @ LINEAR.T + SHIFT, atol=1e-5
    )
    assert carried.at_points[0].values.tolist() == [0, 1, 2, 3]


def test_values_that_are_kept_need_no_gradient(forward):
    carried = carry_by_field(measured(Rule.VALUE), forward)
    np.testing.assert_allclose(carried.thing.points, [SHIFT], atol=1e-5)
    assert carried.thing.quantities[0].values.tolist() == [1.0]


@pytest.mark.parametrize(
    ("thing", "settings", "what"),
    [
        (measured(Rule.DENSITY), CarrySettings(), "dose: the rule density"),
        (LabelVolume(THERE, np.ones(THERE.shape, np.uint16)), CarrySettings(labels="shares"), "how much of"),
        (
            ImageVolume(THERE, np.zeros(THERE.shape, np.float32)),
            CarrySettings(rules=Rules(Rule.DENSITY)),
            "the rule density",
        ),
        (meshed(Rule.DENSITY), CarrySettings(), "dose: the rule density"),
        ("a word", CarrySettings(), "str: this kind of thing"),
    ],
)
def test_what_needs_the_map_is_refused(forward, thing, settings, what):
    with pytest.raises(InputError, match=f"{what}.* needs the exact map") as caught:
        carry_by_field(thing, forward, settings=settings)
    assert caught.value.refused


def test_a_volume_that_lies_elsewhere_or_leaves_some_out(forward):
    zeros = np.zeros((4, 4, 4), np.float32)
    with pytest.raises(InputError, match="holds no place the field points to"):
        carry_by_field(ImageVolume(grid(4, 1.0, 500.0), zeros), forward)
    (finding,) = carry_by_field(ImageVolume(grid(4, 3.0, 0.0), zeros), forward).findings
    assert finding.code == "not-covered"


def test_a_backward_field_is_the_same_the_other_way(volume_map):
    field = backward_field(volume_map, THERE)
    assert isinstance(field, GridField)
    points = np.random.default_rng(0).uniform(-3, 3, (40, 3))
    home = carry_by_field(marks(points @ LINEAR.T + SHIFT), field).thing.points
    np.testing.assert_allclose(home, points, atol=1e-5)
