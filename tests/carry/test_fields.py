"""Fields, carried solid and volume ratio against closed forms."""

import numpy as np
import pytest

from volmap.carry import backward_field, carried_solid, forward_field, sample_field, volume_ratio_image
from volmap.types import Grid, LabelVolume, VolumeMap


def oblique(shape, voxel_mm, centre, *, left=False) -> Grid:
    """A rotated grid with unequal voxels whose middle is at `centre`."""
    turn = np.linalg.qr(np.random.default_rng(8).normal(size=(3, 3)))[0]
    turn *= np.sign(np.linalg.det(turn)) * (-1 if left else 1)
    affine = np.eye(4)
    affine[:3, :3] = turn * voxel_mm
    affine[:3, 3] = centre - affine[:3, :3] @ ((np.array(shape) - 1) / 2)
    grid = Grid(shape, affine)
    assert grid.handedness == ("left" if left else "right")
    return grid


def centres(grid: Grid):
    index = np.stack(np.meshgrid(*[np.arange(n) for n in grid.shape], indexing="ij"), -1)
    return grid.to_world(index.reshape(-1, 3)).reshape(*grid.shape, 3)


def test_direction_trap(known):
    """phi(x) = 2x (shared/outside-checks, recomputed): push at 10 is +10, pull at 20 is -10."""
    volume_map = known.mapped(known.box(4, -12, 12), lambda x: 2 * x)
    at_10 = Grid((1, 1, 1), np.eye(4) + _shift(10))
    at_20 = Grid((1, 1, 1), np.eye(4) + _shift(20))
    np.testing.assert_array_equal(forward_field(volume_map, at_10).displacement[0, 0, 0], [10, 10, 10])
    np.testing.assert_array_equal(backward_field(volume_map, at_20).displacement[0, 0, 0], [-10, -10, -10])
    backward = backward_field(volume_map, at_20)
    assert (backward.grid_space, backward.points_into) == ("target", "source")


def _shift(mm):
    matrix = np.zeros((4, 4))
    matrix[:3, 3] = mm
    return matrix


@pytest.mark.parametrize("left", [False, True])
def test_an_affine_map_is_exact_on_any_grid(known, left):
    """Closed form: u = (A - I) x + b; the vectors are world vectors whatever the grid's axes."""
    A = np.array([[1.2, 0.1, 0], [-0.2, 0.9, 0.15], [0.05, 0, 1.1]])
    shift = np.array([30.0, -20, 10])
    mesh = known.jittered(known.box(4, -6, 6), 0.2)
    volume_map = known.mapped(mesh, lambda x: x @ A.T + shift)
    grid = oblique((14, 11, 9), (0.9, 1.1, 1.6), np.zeros(3), left=left)
    x, u = centres(grid), forward_field(volume_map, grid).displacement
    inside = (np.abs(x) <= 6).all(axis=-1)
    np.testing.assert_array_equal(~np.isnan(u[..., 0]), inside)
    assert inside.any()
    assert not inside.all()
    np.testing.assert_allclose(u[inside], (x @ A.T + shift - x)[inside], atol=4e-6)
    grid = oblique((16, 15, 12), (0.9, 1.1, 1.6), shift, left=left)
    y, v = centres(grid), backward_field(volume_map, grid).displacement
    back = np.linalg.solve(A, (y - shift)[..., None])[..., 0]
    inside = (np.abs(back) <= 6).all(axis=-1)
    np.testing.assert_array_equal(~np.isnan(v[..., 0]), inside)
    np.testing.assert_allclose(v[inside], (back - y)[inside], atol=4e-6)


def _errors(known, rule, inverse, n):
    """Root mean square error of both fields against the closed form, at the voxels inside."""
    volume_map = known.mapped(known.box(n, -0.6, 0.6), rule)
    grid = Grid((24, 24, 24), np.diag([0.039, 0.039, 0.039, 1.0]) + _shift(-0.45))  # off the lattice
    x = centres(grid)
    forward = forward_field(volume_map, grid).displacement
    image = rule(np.zeros((1, 3)))[0]
    pulled = Grid((24, 24, 24), np.diag([0.0209, 0.0209, 0.0209, 1.0]) + _shift(-0.24) + _shift(image))
    y = centres(pulled)
    backward = backward_field(volume_map, pulled).displacement
    assert not np.isnan(forward).any()
    assert not np.isnan(backward).any()
    return _rms(forward + x - rule(x)), _rms(backward + y - inverse(y))


def _rms(error):
    return np.sqrt((error**2).mean())


@pytest.mark.parametrize("name", ["shears", "twist", "wave"])
def test_fields_converge_at_second_order(known, name):
    """Rate: a piecewise linear interpolant of a smooth map errs like h^2, and so does its inverse."""
    rule, inverse = {
        "shears": (known.shears, known.unshears),
        "twist": (known.twist, lambda y: known.twist(y, -0.7)),
        "wave": (known.wave, _unwave),
    }[name]
    coarse, fine = _errors(known, rule, inverse, 8), _errors(known, rule, inverse, 16)
    for before, after in zip(coarse, fine, strict=True):
        assert after < 0.004
        assert np.log2(before / after) == pytest.approx(2, abs=0.35)


def _unwave(y):
    """Inverse of x + 0.5 sin x by Newton's method, which converges as 1 + 0.5 cos x > 0."""
    x = y[..., 0].copy()
    for _ in range(30):
        x -= (x + 0.5 * np.sin(x) - y[..., 0]) / (1 + 0.5 * np.cos(x))
    return np.stack([x, y[..., 1], y[..., 2]], -1)


def test_shear_value(known):
    """(.5, .5, .5) -> (.8024413, .56628643, .68176465) (shared/outside-checks, recomputed)."""
    mesh = known.box(2, 0.4, 0.6)  # (.5, .5, .5) is a mesh point
    field = forward_field(known.mapped(mesh, known.shears), Grid((1, 1, 1), np.eye(4) + _shift(0.5)))
    np.testing.assert_allclose(
        field.displacement[0, 0, 0] + 0.5, [0.8024413, 0.56628643, 0.68176465], atol=1e-7
    )


def test_volume_ratio_of_known_maps(known):
    """J = 1 + A cos x for the wave, J = 1 for twist and shears (outside-checks); whole volumes agree."""
    grid = Grid((9, 9, 9), np.diag([0.1, 0.1, 0.1, 1.0]) + _shift(-0.4))
    x = centres(grid)[..., 0]
    fine = known.box(24, -0.6, 0.6)
    ratio = volume_ratio_image(known.mapped(fine, known.wave), grid).values
    np.testing.assert_allclose(ratio, 1 + 0.5 * np.cos(x), atol=0.012)
    assert np.ptp(ratio) > 0.03
    for rule in (known.twist, known.shears):
        np.testing.assert_allclose(volume_ratio_image(known.mapped(fine, rule), grid).values, 1, atol=0.05)
    far = volume_ratio_image(known.mapped(fine, known.twist), Grid((2, 1, 1), np.eye(4) + _shift(0)))
    assert np.isnan(far.values[1, 0, 0])


def _two_labels(known, n=6) -> VolumeMap:
    """A cube with label 2 where x < 0, mapped by phi(x) = 1.5 x."""
    mesh = known.box(n, -6, 6)
    labels = np.where(mesh.points[mesh.tets].mean(axis=1)[:, 0] < 0, 2, 1)
    mesh = type(mesh)(mesh.points, mesh.tets, labels)
    return known.mapped(mesh, lambda x: 1.5 * x)


def test_carried_solid_of_a_known_map(known):
    """Closed form: the cube [-9, 9]^3, label 2 where x < 0."""
    grid = oblique((20, 25, 16), (1.1, 0.9, 1.3), np.zeros(3), left=True)
    solid = carried_solid(_two_labels(known), grid, names={1: "right half", 2: "left half"})
    y = centres(grid)
    inside = (np.abs(y) <= 9).all(axis=-1)
    np.testing.assert_array_equal(solid.labels, inside * np.where(y[..., 0] < 0, 2, 1))
    assert isinstance(solid, LabelVolume)
    assert solid.name_of(2) == "left half"


def test_sampling_a_field_is_exact_for_affine_maps_and_refuses_holes(known):
    """Trilinear interpolation reproduces linear functions; no value leaks out of undefined voxels."""
    volume_map = known.mapped(known.box(3, -4, 4), lambda x: x @ np.diag([1.5, 0.8, 1.1]) + 5)
    grid = oblique((15, 13, 12), (0.8, 0.9, 1.0), np.zeros(3))
    field = forward_field(volume_map, grid)
    points = np.random.default_rng(4).uniform(-6, 6, (500, 3))
    u, inside = sample_field(field, points)
    np.testing.assert_allclose(u[inside], points[inside] @ np.diag([0.5, -0.2, 0.1]) + 5, atol=2e-6)
    low = np.floor(grid.to_index(points)).astype(int)
    for p in range(len(points)):  # slow twin of "all eight defined"
        cell = [slice(a, a + 2) for a in low[p]]
        exists = (low[p] >= 0).all() and (low[p] + 1 < grid.shape).all()
        assert inside[p] == (exists and not np.isnan(field.displacement[tuple(cell)]).any())
    assert inside.any()
    assert not inside.all()


def test_a_voxel_centre_gives_its_own_value_even_beside_a_hole(known):
    volume_map = known.mapped(known.box(3, 0, 4), known.wave)
    grid = oblique((7, 7, 7), (0.8, 0.9, 1.0), np.full(3, 3.0), left=True)
    field = forward_field(volume_map, grid)
    u, inside = sample_field(field, centres(grid).reshape(-1, 3))
    np.testing.assert_array_equal(inside.reshape(grid.shape), field.support.astype(bool))
    np.testing.assert_allclose(u.reshape(*grid.shape, 3), field.displacement, atol=1e-6)
