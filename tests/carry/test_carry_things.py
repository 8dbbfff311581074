"""The verb: landmarks, volumes, meshes and surfaces, both ways."""

import numpy as np
import pytest

from volmap.carry import CarrySettings, carry, move_points
from volmap.types import Grid, ImageVolume, InputError, LabelVolume, Landmarks, TetMesh, VolumeMap


def _grid(shape, spacing, origin) -> Grid:
    affine = np.diag([*np.broadcast_to(spacing, 3), 1.0])
    affine[:3, 3] = origin
    return Grid(shape, affine)


@pytest.fixture(scope="module")
def sheared(known) -> VolumeMap:
    return known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)


def _slow_move(volume_map, point):
    """Slow twin: affine map of the deepest tet, by a 4x4 solve with LAPACK."""
    points, tets = volume_map.mesh.points, volume_map.mesh.tets
    system = np.concatenate([points[tets].swapaxes(1, 2), np.ones((len(tets), 1, 4))], axis=1)
    weights = np.linalg.solve(system, np.append(point, 1.0)[None, :, None])[..., 0]
    t = weights.min(axis=1).argmax()
    return weights[t] @ volume_map.images[tets[t]]


def _marks(points):
    return Landmarks(tuple(f"bead {i}" for i in range(len(points))), points)


def test_points_agree_with_the_slow_twin(sheared):
    points = np.random.default_rng(3).uniform(-0.69, 0.69, (60, 3))
    carried = carry(_marks(points), sheared)
    assert not carried.findings
    expected = [_slow_move(sheared, p) for p in points]
    np.testing.assert_allclose(carried.thing.points, expected, atol=1e-9)


def test_there_and_back_is_nothing(sheared):
    """Law: forward then reverse is the identity, inside the mesh, to 1e-9 mm."""
    points = np.random.default_rng(4).uniform(-0.69, 0.69, (2000, 3))
    there = carry(_marks(points), sheared).thing
    back = carry(there, sheared, reverse=True).thing
    np.testing.assert_allclose(back.points, points, atol=1e-9)
    assert np.abs(there.points - points).max() > 0.2


def test_reverse_goes_the_other_way(known):
    """phi(x) = 2x: a point at 5 goes to 10, and with reverse a point at 10 to 5."""
    volume_map = known.mapped(known.box(2, -8, 8), lambda x: 2 * x)
    np.testing.assert_allclose(carry(_marks([[5.0, 5, 5]]), volume_map).thing.points, [[10, 10, 10]])
    reverse = carry(_marks([[10.0, 10, 10]]), volume_map, reverse=True)
    np.testing.assert_allclose(reverse.thing.points, [[5, 5, 5]])


def test_points_outside_are_continued_or_left_out_and_named(known):
    """Closed form: distance to a box, and an affine map continued beyond it."""
    A = np.array([[1.5, 0.2, 0], [0, 0.8, 0], [0.1, 0, 1.2]])
    volume_map = known.mapped(known.box(3, 0, 9), lambda x: x @ A.T + 3)
    points = np.array([[4, 4, 4], [9.5, 4, 4], [9.3, 9.4, 5], [13, 4, 4], [-2, -2, -1.0]])
    marks = Landmarks(("in", "near", "edge", "far", "corner"), points, ("guide", "check") * 2 + ("guide",))
    carried = carry(marks, volume_map, settings=CarrySettings(reach_mm=0.75))
    assert carried.thing.names == ("in", "near", "edge")
    assert carried.thing.roles == ("guide", "check", "guide")
    np.testing.assert_allclose(carried.thing.points, points[:3] @ A.T + 3, atol=1e-12)
    near, far = carried.findings
    assert near.code == "outside-carried"
    assert "near (0.50 mm), edge (0.50 mm)" in near.sentence
    assert far.code == "outside-left-out"
    assert "far (4.00 mm), corner (3.00 mm)" in far.sentence
    moved = move_points(volume_map, points)
    np.testing.assert_allclose(moved.outside_mm, [0, 0.5, 0.5, 4, 3], atol=1e-12)
    assert moved.carried.tolist() == [True, False, False, False, False]


def _random_labels(grid, seed=0):
    labels = np.random.default_rng(seed).integers(0, 4, grid.shape).astype(np.uint16)
    return LabelVolume(grid, labels, {1: "one", 2: "two"}, "a.nii.gz")


@pytest.mark.parametrize("reverse", [False, True])
def test_labels_through_the_identity_are_identical(known, reverse):
    """Law: the identity changes no voxel, on a left-handed oblique grid; names are kept."""
    turn = np.linalg.qr(np.random.default_rng(2).normal(size=(3, 3)))[0]
    affine = np.eye(4)
    affine[:3, :3] = turn * [-0.8, 1.0, 1.7]
    grid = Grid((9, 8, 7), affine)
    low, high = np.array([-60.0] * 3), np.array([60.0] * 3)
    volume_map = known.mapped(known.jittered(known.box(6, low, high), 0.2), lambda x: x)
    thing = _random_labels(grid)
    carried = carry(thing, volume_map, reverse=reverse, onto=grid)
    np.testing.assert_array_equal(carried.thing.labels, thing.labels)
    assert dict(carried.thing.names) == {1: "one", 2: "two"}
    image = ImageVolume(grid, np.random.default_rng(1).normal(size=grid.shape), "HU", "ct.nii.gz")
    again = carry(image, volume_map, reverse=reverse, onto=grid).thing
    np.testing.assert_allclose(again.values, image.values, atol=1e-6)
    assert again.unit == "HU"


def test_labels_and_images_go_the_right_way(known):
    """phi(x) = x + (3, -2, 1): content at voxel p is found at p + (3, -2, 1), and back with reverse."""
    step = np.array([3, -2, 1])
    volume_map = known.mapped(known.box(3, -0.5, 9.5), lambda x: x + step)
    here, there = _grid((10, 10, 10), 1, 0), _grid((16, 16, 16), 1, -3)
    thing = _random_labels(here)
    carried = carry(thing, volume_map, onto=there)
    expected = np.zeros(there.shape, int)
    window = tuple(slice(3 + s, 13 + s) for s in step)
    expected[window] = thing.labels
    np.testing.assert_array_equal(carried.thing.labels, expected)
    assert not carried.findings
    back = carry(carried.thing, volume_map, reverse=True, onto=here)
    np.testing.assert_array_equal(back.thing.labels, thing.labels)
    image = ImageVolume(here, thing.labels.astype(np.float32))
    moved = carry(image, volume_map, onto=there).thing.values
    np.testing.assert_allclose(moved[window], image.values, atol=1e-6)
    assert np.isnan(moved).sum() == 16**3 - 10**3


def test_a_linear_image_is_carried_exactly(known):
    """Closed form: intensity c.x pulled through y = A x + b is c.A^-1 (y - b)."""
    A = np.diag([1.4, 0.7, 1.1])
    volume_map = known.mapped(known.box(2, 1, 8), lambda x: x @ A)
    here, there = _grid((10, 10, 10), 1, 0), _grid((20, 14, 16), 0.6, 0.5)
    index = np.stack(np.meshgrid(*[np.arange(10)] * 3, indexing="ij"), -1)
    image = ImageVolume(here, index @ np.array([1, 10, 100.0]))
    values = carry(image, volume_map, onto=there).thing.values
    y = np.stack(np.meshgrid(*[np.arange(n) for n in there.shape], indexing="ij"), -1) * 0.6 + 0.5
    x = y / np.diag(A)
    inside = ((x >= 1) & (x <= 8)).all(axis=-1)
    np.testing.assert_array_equal(~np.isnan(values), inside)
    np.testing.assert_allclose(values[inside], (x @ [1, 10, 100.0])[inside], rtol=1e-6)


def test_nearest_takes_the_lower_voxel_half_way(known):
    """Stated rule: preimages half-way between two voxels belong to the lower one.

    The body is six tets, larger than both grids: no centroid is inside them, but voxels are inside it.
    """
    volume_map = known.mapped(known.box(1, -5, 30), lambda x: x + 0.5)
    here = _grid((8, 8, 8), 1, 0)
    thing = _random_labels(here)
    carried = carry(thing, volume_map, onto=_grid((8, 8, 8), 1, 1))
    np.testing.assert_array_equal(carried.thing.labels, thing.labels)
    assert {f.code for f in carried.findings} == {"not-covered"}


def test_volumes_that_do_not_lie_on_the_body_are_refused_or_named(known):
    volume_map = known.mapped(known.box(4, 0, 8), lambda x: x + 100)
    here, there = _grid((9, 9, 9), 1, 0), _grid((9, 9, 9), 1, 100)
    with pytest.raises(InputError, match="holds no part of the body in source"):
        carry(_random_labels(there), volume_map, onto=there)
    with pytest.raises(InputError, match="holds no part of the body in target"):
        carry(_random_labels(here), volume_map, onto=here)
    with pytest.raises(InputError, match="needs a grid"):
        carry(_random_labels(here), volume_map)
    half = LabelVolume(_grid((4, 9, 9), 1, 0), np.ones((4, 9, 9), np.uint16))
    codes = [(f.code, f.sentence) for f in carry(half, volume_map, onto=there).findings]
    assert codes == [("not-covered", "the volume leaves out 50 % of the body in source")]


def test_labels_lost_or_outside_the_body_are_named(known):
    volume_map = known.mapped(known.box(4, 0, 8), lambda x: 0.5 * x)
    labels = np.zeros((20, 9, 9), np.uint16)
    labels[2:16, 2:7, 2:7] = 1  # x = 2 .. 15, of which 2 .. 8 are in the body
    labels[3, 3, 3] = 2  # one voxel, at an odd place: halved, no voxel centre falls into it
    thing = LabelVolume(_grid((20, 9, 9), 1, 0), labels, {1: "lobe", 2: "speck"}, "a.nii.gz")
    found = {f.code: f.sentence for f in carry(thing, volume_map, onto=_grid((5, 5, 5), 1, 0)).findings}
    assert found["label-lost"] == "speck has no voxel on the new grid"
    assert found["outside-left-out"] == "50 % of lobe lies outside the body and was not carried"


def test_meshes_and_surfaces_go_point_by_point(known, sheared):
    inner = known.box(3, -0.5, 0.5)
    carried = carry(inner, sheared)
    assert isinstance(carried.thing, TetMesh)
    expected = [_slow_move(sheared, p) for p in inner.points]
    np.testing.assert_allclose(carried.thing.points, expected, atol=1e-9)
    np.testing.assert_array_equal(carried.thing.tets, inner.tets)
    back = carry(carried.thing, sheared, reverse=True)
    np.testing.assert_allclose(back.thing.points, inner.points, atol=1e-9)
    surface = carry(inner.interfaces, sheared).thing
    np.testing.assert_array_equal(surface.points, carried.thing.points)
    assert not carried.findings


def test_a_mesh_partly_outside_is_continued_or_refused(known, sheared):
    slightly = known.box(2, -0.75, 0.6)
    carried = carry(slightly, sheared, settings=CarrySettings(reach_mm=0.2))
    assert [f.code for f in carried.findings] == ["outside-carried"]
    with pytest.raises(InputError, match="outside the body") as caught:
        carry(slightly, sheared, settings=CarrySettings(reach_mm=0.01))
    assert caught.value.refused


def test_tets_that_turn_over_are_named(known):
    """A tet that spans a deep fold of the map turns over though no tet of the map does."""
    mesh = known.box((8, 1, 1), 0, (8, 1, 1))
    volume_map = known.mapped(mesh, lambda x: np.stack([x[:, 0], x[:, 1], x[:, 2] + _zigzag(x[:, 0])], -1))
    assert volume_map.volume_ratio.min() > 0
    flat = np.array([[0.1, 0.2, 0.1], [2.0, 0.2, 0.1], [1.0, 0.9, 0.1], [1.0, 0.4, 0.5]])
    thing = TetMesh(flat, np.array([[0, 1, 2, 3]]), np.array([1]))
    assert thing.volumes[0] > 0
    carried = carry(thing, volume_map)
    assert carried.thing.volumes[0] < 0
    assert [f.code for f in carried.findings] == ["turned-tets"]


def _zigzag(x):
    return np.where(np.round(x) % 2 == 1, -4.0, 0.0) * (np.round(x) == 1)


def test_unknown_things_are_refused(sheared):
    with pytest.raises(InputError, match="cannot be carried"):
        carry("a string", sheared)


def test_points_against_extended_precision(known):
    """Slow twin: barycentric coordinates by Cramer's rule in extended precision, over all tets; to 1e-9 mm.

    A body of 80 mm that lies a metre from the origin, as scanners have it.
    """
    shift = np.array([900, -1200, 300])
    mesh = known.jittered(known.box(4, -40 + shift, 40 + shift), 0.2)
    volume_map = known.mapped(mesh, lambda x: 1.1 * x + 3 * np.sin(x[:, [1, 2, 0]] / 20))
    points = np.random.default_rng(8).uniform(-39, 39, (200, 3)) + shift
    carried = carry(_marks(points), volume_map).thing.points
    corners = mesh.points[mesh.tets].astype(np.longdouble)
    edges = corners[:, 1:] - corners[:, :1]
    volume = _triple(*edges.swapaxes(0, 1))
    for point, found in zip(points.astype(np.longdouble), carried, strict=True):
        step = point - corners[:, 0]
        a, b, c = edges.swapaxes(0, 1)
        inner = np.stack([_triple(step, b, c), _triple(a, step, c), _triple(a, b, step)], 1) / volume[:, None]
        weights = np.concatenate([1 - inner.sum(axis=1, keepdims=True), inner], axis=1)
        t = weights.min(axis=1).argmax()
        exact = weights[t] @ volume_map.images[mesh.tets[t]].astype(np.longdouble)
        assert np.linalg.norm((found - exact).astype(float)) < 1e-9


def _triple(a, b, c):
    """Triple products, row by row, in the precision of what is given."""
    cross = [b[:, i] * c[:, j] - b[:, j] * c[:, i] for i, j in ((1, 2), (2, 0), (0, 1))]
    return a[:, 0] * cross[0] + a[:, 1] * cross[1] + a[:, 2] * cross[2]
