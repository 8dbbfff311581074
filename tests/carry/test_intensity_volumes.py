"""Images, vectors and tensors on grids: closed forms, a slow spline, mass."""

import numpy as np
import pytest

from volmap.carry import CarrySettings, apply_rule, carry
from volmap.carry.intensity_volumes import pull_image, pull_tensors, pull_vectors
from volmap.carry.splines import interpolator
from volmap.types import Grid, ImageVolume, InputError, Rule, Rules, TensorVolume, VectorVolume


def grid_of(shape, spacing, origin) -> Grid:
    affine = np.diag([*np.broadcast_to(spacing, 3), 1.0])
    affine[:3, 3] = origin
    return Grid(shape, affine)


def centres(grid):
    return np.moveaxis(np.indices(grid.shape), 0, -1) @ grid.affine[:3, :3].T + grid.affine[:3, 3]


def _spline_twin(values, x):
    """Slow twin in one dimension: a dense system for the coefficients, mirrored at both ends."""

    def basis(t):
        t = abs(t)
        return 2 / 3 - t**2 + t**3 / 2 if t < 1 else max(2 - t, 0) ** 3 / 6

    def mirrored(i, n):
        return n - 1 - abs(n - 1 - abs(i))

    n = len(values)
    system = np.zeros((n, n))
    for i in range(n):
        for j in range(i - 1, i + 2):
            system[i, mirrored(j, n)] += basis(i - j)
    coefficients = np.linalg.solve(system, values)
    near = range(int(np.floor(x)) - 1, int(np.floor(x)) + 3)
    return sum(coefficients[mirrored(j, n)] * basis(x - j) for j in near)


def test_cubic_agrees_with_a_dense_solve():
    """Slow twin: cubic B-splines mirrored at both ends, axis after axis, up to the outermost centres."""
    random = np.random.default_rng(0)
    values = random.normal(size=(6, 5, 7)).astype(np.float32)
    places = np.concatenate([random.uniform(0, [5, 4, 6], (40, 3)), [[0, 0, 0], [5, 4, 6], [2, 3, 4]]])
    expected = []
    for x, y, z in places:
        plane = np.array([[_spline_twin(row, z) for row in rows] for rows in values.astype(float)])
        expected.append(_spline_twin(np.array([_spline_twin(row, y) for row in plane]), x))
    found = interpolator(values[..., None], "cubic")(places)[:, 0]
    np.testing.assert_allclose(found, expected, atol=1e-12)
    np.testing.assert_allclose(found[-3:], [values[0, 0, 0], values[5, 4, 6], values[2, 3, 4]], atol=1e-12)


def test_cubic_is_of_fourth_order_and_linear_of_second():
    """Rate (Unser 1999): halving the voxel divides the error of a smooth function by 16, and by 4.

    Cosines with level ends are mirrored without a kink.
    """
    errors = {}
    places = np.random.default_rng(1).uniform(0, 1, (500, 3))
    for mode in ("linear", "cubic"):
        for n in (8, 16):
            x = np.arange(n + 1) / n
            values = np.einsum("i,j,k->ijk", *[np.cos(np.pi * x)] * 3)
            truth = np.prod(np.cos(np.pi * places), axis=1)
            found = interpolator(values.astype(np.float32)[..., None], mode)(places * n)[:, 0]
            errors[mode, n] = np.sqrt(np.mean((found - truth) ** 2))
    assert 3.5 < errors["linear", 8] / errors["linear", 16] < 4.5
    assert 12 < errors["cubic", 8] / errors["cubic", 16] < 20


@pytest.mark.parametrize("mode", ["linear", "cubic"])
def test_holes_spread_to_the_cells_around_them_and_no_farther(mode):
    values = np.random.default_rng(2).normal(size=(7, 7, 7)).astype(np.float32)
    values[3, 3, 3] = np.nan
    look = interpolator(values[..., None], mode)
    places = np.array(
        [[3, 3, 3], [2.5, 3, 3], [2.5, 2.5, 2.5], [3, 3, 4], [1.9, 3, 3], [2, 2.5, 3], [6.1, 3, 3]]
    )
    defined = ~np.isnan(look(places)[:, 0])
    assert defined.tolist() == [False, False, False, True, True, True, False]


def test_cubic_fills_holes_with_the_nearest_value():
    """Stated rule: a hole takes the value of the nearest voxel that has one."""
    values = np.random.default_rng(2).normal(size=(9, 4, 4)).astype(np.float32)
    values[4:] = 5.0
    filled = values.copy()
    values[6:] = np.nan
    places = np.random.default_rng(3).uniform(0, [5, 3, 3], (50, 3))
    found = interpolator(values[..., None], "cubic")(places)
    np.testing.assert_allclose(found, interpolator(filled[..., None], "cubic")(places), atol=1e-12)


MATRIX = np.array([[1.1, 0.2, 0], [-0.1, 0.8, 0.15], [0.1, 0, 1.2]])


def test_density_keeps_the_mass_of_an_affine_map(known):
    """Closed form: values / det A; the sum over voxels is the mass, as far as the sampled boundary allows."""
    volume_map = known.mapped(known.box(3, 0, 12), lambda x: x @ MATRIX.T + 2)
    here, there = grid_of((25, 25, 25), 0.5, 0.0), grid_of((70, 70, 70), 0.3, 0.0)
    x = centres(here)
    bump = np.exp(-((x - 6) ** 2).sum(axis=-1) / 4)  # nothing at the boundary
    image = ImageVolume(here, bump, "1/mm3")
    density = pull_image(image, volume_map, there, rule=Rule.DENSITY)[0]
    value = pull_image(image, volume_map, there)[0]
    np.testing.assert_allclose(density.values * np.linalg.det(MATRIX), value.values, rtol=1e-6)
    mass = np.nansum(density.values) * there.voxel_mm3
    assert mass == pytest.approx(image.values.sum() * here.voxel_mm3, rel=1e-3)
    assert np.nansum(value.values) * there.voxel_mm3 == pytest.approx(mass * np.linalg.det(MATRIX), rel=1e-6)


def test_density_keeps_the_mass_of_a_wave(known):
    """Law: J varies from 0.5 to 1.5 between tets, the mass stays; without the rule it does not."""
    mesh = known.box((24, 2, 2), [0, 0, 0], [2 * np.pi, 2, 2])
    volume_map = known.mapped(mesh, known.wave)
    here, there = (
        grid_of((127, 17, 17), [0.05, 0.125, 0.125], 0),
        grid_of((315, 17, 17), [0.02, 0.125, 0.125], 0),
    )
    x = centres(here)[..., 0]
    image = ImageVolume(here, 1 + np.sin(x) ** 2 + np.cos(x))
    cut = slice(1, -1)  # values on the outermost planes would count half

    def sum_of(volume):
        return np.nansum(volume.values[:, cut, cut]) * volume.grid.voxel_mm3

    mass = 3 * np.pi * (15 * 0.125) ** 2  # of 1 + sin^2 + cos over 0..2 pi: 3 pi
    density = sum_of(pull_image(image, volume_map, there, rule=Rule.DENSITY)[0])
    assert density == pytest.approx(mass, rel=0.01)
    assert sum_of(pull_image(image, volume_map, there)[0]) > 1.1 * mass


@pytest.mark.parametrize("mode", ["linear", "cubic"])
@pytest.mark.parametrize("rule", [Rule.TURN, Rule.LINE, Rule.GRADIENT, Rule.FLUX])
def test_constant_vectors_and_tensors_follow_the_rule(known, rule, mode):
    """Closed form: everywhere the same F, so everywhere the same answer, in the world's axes on any grid."""
    volume_map = known.mapped(known.box(3, 0, 6), lambda x: x @ MATRIX.T)
    oblique = np.linalg.qr(np.random.default_rng(0).normal(size=(3, 3)))[0] * [-1, 1.2, 0.9]
    affine = np.eye(4)
    affine[:3, :3], affine[:3, 3] = oblique, -oblique @ [11.5, 11.5, 11.5] + 3
    here, there = Grid((24, 24, 24), affine), grid_of((9, 8, 10), 0.9, 0.1)
    vector = np.array([0.3, -1.0, 0.7])
    tensor = np.array([[2.0, 0.3, -0.1], [0.3, 1.0, 0.4], [-0.1, 0.4, 0.5]])
    lower = tensor[[0, 1, 1, 2, 2, 2], [0, 0, 1, 0, 1, 2]]
    vectors = VectorVolume(here, np.broadcast_to(vector, (24, 24, 24, 3)), "mm/s")
    tensors = TensorVolume(here, np.broadcast_to(lower, (24, 24, 24, 6)), "mm2/s")
    moved = pull_vectors(vectors, volume_map, there, rule=rule, mode=mode)[0]
    again = pull_tensors(tensors, volume_map, there, rule=rule, mode=mode)[0]
    inverse = np.linalg.inv(MATRIX)
    u, _, v = np.linalg.svd(MATRIX)
    expected = {
        Rule.TURN: (u @ v @ vector, u @ v @ tensor @ (u @ v).T),
        Rule.LINE: (MATRIX @ vector, MATRIX @ tensor @ MATRIX.T),
        Rule.GRADIENT: (inverse.T @ vector, inverse.T @ tensor @ inverse),
        Rule.FLUX: tuple(a / np.linalg.det(MATRIX) for a in (MATRIX @ vector, MATRIX @ tensor @ MATRIX.T)),
    }[rule]
    inside = ~np.isnan(moved.values[..., 0])
    assert 100 < inside.sum() < inside.size
    np.testing.assert_allclose(
        moved.values[inside], np.broadcast_to(expected[0], (inside.sum(), 3)), rtol=2e-6
    )
    found = again.values[inside]
    six = expected[1][[0, 1, 1, 2, 2, 2], [0, 0, 1, 0, 1, 2]]
    np.testing.assert_allclose(found, np.broadcast_to(six, found.shape), atol=4e-6)
    assert moved.unit == "mm/s"
    assert again.unit == "mm2/s"


def test_directions_turn_with_a_twist(known):
    """Closed form: R of each tet of a fine twist is the rotation by rate z, to the order of the mesh."""
    rate = 0.3
    volume_map = known.mapped(
        known.box((4, 4, 16), [-0.5, -0.5, -4], [0.5, 0.5, 4]), lambda x: known.twist(x, rate)
    )
    here, there = (
        grid_of((9, 9, 65), 0.125, [-0.5, -0.5, -4]),
        grid_of((5, 5, 33), [0.15, 0.15, 0.2], [-0.3, -0.3, -3.2]),
    )
    vectors = VectorVolume(here, np.broadcast_to([1.0, 0, 0], (*here.shape, 3)))
    moved = pull_vectors(vectors, volume_map, there, rule=Rule.TURN)[0].values
    angle = rate * centres(there)[..., 2]
    np.testing.assert_allclose(np.linalg.norm(moved, axis=-1), 1.0, atol=1e-6)
    expected = np.stack([np.cos(angle), np.sin(angle), 0 * angle], -1)
    np.testing.assert_allclose(moved, expected, atol=0.16)  # a tet is 0.5 mm high: 0.15
    back = pull_vectors(
        VectorVolume(there, moved),
        volume_map.reversed(),
        grid_of((3, 3, 9), [0.15, 0.15, 0.25], [-0.15, -0.15, -1]),
        rule=Rule.TURN,
    )[0].values
    np.testing.assert_allclose(back, np.broadcast_to([1.0, 0, 0], back.shape), atol=0.16)


def test_the_rule_uses_the_tet_of_the_preimage(known):
    """Slow twin: each voxel alone, its tet found by solving for barycentric coordinates."""
    volume_map = known.mapped(known.jittered(known.box(3, -1, 1), 0.2), lambda x: known.twist(x, 0.5))
    here, there = grid_of((9, 9, 9), 0.25, -1), grid_of((7, 7, 7), 0.3, -0.93)
    random = np.random.default_rng(4)
    vectors = VectorVolume(here, random.normal(size=(9, 9, 9, 3)))
    moved = pull_vectors(vectors, volume_map, there, rule=Rule.LINE)[0].values
    corners = volume_map.images[volume_map.mesh.tets]
    system = np.concatenate([corners.swapaxes(1, 2), np.ones((len(corners), 1, 4))], axis=1)
    look = interpolator(np.array(vectors.values), "linear")
    n = 0
    for voxel in random.integers(0, 7, (60, 3)):
        y = there.to_world(voxel[None])[0]
        weights = np.linalg.solve(system, np.append(y, 1.0)[None, :, None])[..., 0]
        t = weights.min(axis=1).argmax()
        if weights[t].min() < 1e-6:
            continue
        x = weights[t] @ volume_map.mesh.points[volume_map.mesh.tets[t]]
        expected = apply_rule(Rule.LINE, look(here.to_index(x[None])), volume_map.gradients[[t]])[0]
        np.testing.assert_allclose(moved[tuple(voxel)], expected, atol=1e-6)
        n += 1
    assert n > 20


def test_vectors_without_a_rule_and_rules_of_others_are_refused(known):
    volume_map = known.mapped(known.box(2, 0, 4), lambda x: x)
    grid = grid_of((5, 5, 5), 1, 0)
    vectors = VectorVolume(grid, np.ones((5, 5, 5, 3)))
    tensors = TensorVolume(grid, np.ones((5, 5, 5, 6)))
    image = ImageVolume(grid, np.ones((5, 5, 5)))
    for thing in (vectors, tensors):
        with pytest.raises(InputError, match="needs a rule"):
            carry(thing, volume_map, onto=grid)
        with pytest.raises(InputError, match="is no rule for a"):
            carry(thing, volume_map, onto=grid, settings=CarrySettings(rules=Rules(Rule.DENSITY)))
    with pytest.raises(InputError, match="is no rule for a scalar"):
        carry(image, volume_map, onto=grid, settings=CarrySettings(rules=Rules(Rule.TURN)))
    settings = CarrySettings(rules=Rules(Rule.GRADIENT), image="cubic")
    for thing in (vectors, tensors):
        carried = carry(thing, volume_map, onto=grid, settings=settings).thing
        assert type(carried) is type(thing)
        np.testing.assert_allclose(carried.values, 1.0, atol=1e-6)
