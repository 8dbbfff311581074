"""The objective on a real mesh: derivatives, the patch test, order of the bodies, steps that never invert."""

import numpy as np
import pytest
from hand_made_bodies import matcher

from volmap.kernels.energies import ENERGIES
from volmap.kernels.observations import Observations
from volmap.kernels.predicates import orientation_signs
from volmap.mapping.objective import Objective

AFFINE = np.array([[1.15, 0.2, 0.0], [-0.1, 0.9, 0.1], [0.1, 0.05, 1.05]])


def objective_of(mesh, energy="soft-tissue"):
    return Objective(np.array(mesh.points), np.array(mesh.tets), energy=energy)


def nothing():
    k = np.empty
    return Observations(k((0, 4), np.int64), k((0, 4)), k((0, 6), np.int64), k((0, 3)), k((0, 3)), k(0), k(0))


def held(rows, places, strength):
    """Single points held at places, in all directions."""
    n = len(rows)
    corners, weights = np.zeros((n, 4), np.int64), np.zeros((n, 4))
    corners[:, 0], weights[:, 0] = rows, 1.0
    normals = np.tile([1.0, 0, 0], (n, 1))
    edges = np.full((n, 6), -1)
    return Observations(corners, weights, edges, places, normals, np.full(n, strength), np.ones(n))


def wavy(points, share=0.06):
    size = np.ptp(points, axis=0)
    return points @ AFFINE.T + share * size * np.sin(2 * np.pi * points[:, [1, 2, 0]] / size[[1, 2, 0]])


@pytest.mark.parametrize("energy", ENERGIES)
def test_gradient_against_finite_differences(shell, energy):
    mesh, target = shell
    objective = objective_of(mesh, energy)
    images = np.ascontiguousarray(wavy(mesh.points))
    pulls, _ = matcher(mesh, target).match(images)
    value = objective.differentiate(images, pulls)
    assert value.total == pytest.approx(objective.value(images, pulls).total, rel=1e-12)
    gradient = objective.gradient.copy()
    for seed in range(2):
        d = np.random.default_rng(seed).normal(size=images.shape)
        up, down = (objective.value(images + h * d, pulls).total for h in (1e-5, -1e-5))
        assert (up - down) / 2e-5 == pytest.approx((gradient * d).sum(), rel=1e-4)


@pytest.mark.parametrize("energy", ENERGIES)
def test_patch_test(shell, energy):
    """Closed form (patch test): with affine boundary data the affine interior is stationary."""
    mesh, _ = shell
    objective = objective_of(mesh, energy)
    images = mesh.points @ AFFINE.T + (5.0, -3.0, 2.0)
    objective.differentiate(images, nothing())
    interior = np.ones(len(images), bool)
    surface = np.unique(mesh.interfaces.triangles[mesh.interfaces.sides[:, 1] == 0])
    interior[surface] = False
    assert interior.sum() > 100
    size = np.abs(objective.forces).max()
    assert size > 1e-6  # the tets themselves do pull
    assert np.abs(objective.gradient[interior]).max() < 1e-12 * max(1.0, size)


@pytest.mark.parametrize("energy", ["soft-tissue", "symmetric-dirichlet", "log-strain", "arap"])
def test_newton_steps_find_the_affine_interior(shell, energy):
    """Patch test, by the solver's own steps from a disturbed interior, boundary held by strong pulls."""
    mesh, _ = shell
    objective = objective_of(mesh, energy)
    wanted = mesh.points @ AFFINE.T
    surface = np.unique(mesh.interfaces.triangles[mesh.interfaces.sides[:, 1] == 0])
    rng = np.random.default_rng(0)
    images = wanted + 0.12 * rng.normal(size=wanted.shape)
    images[surface] = wanted[surface]
    images = np.ascontiguousarray(images)
    assert objective.is_valid(images)
    pulls = held(surface, wanted[surface], 1e3)
    for _ in range(12):
        before = objective.differentiate(images, pulls).total
        direction, slope, _ = objective.newton_step(tolerance=1e-6, most=2000)
        assert slope <= 0
        length = min(1.0, objective.largest_step(images, direction))
        while objective.value(images + length * direction, pulls).total > before + 1e-4 * length * slope:
            length /= 2
            if length < 1e-8:
                break
        images = images + length * direction
    assert np.abs(images - wanted).max() < 1e-3


@pytest.mark.parametrize("seed", range(4))
def test_the_largest_step_never_inverts(shell, seed):
    """Exact signs, along rough directions of 100 mm that would invert most tets at full length."""
    mesh, _ = shell
    objective = objective_of(mesh)
    images = np.array(mesh.points)
    direction = 100.0 * np.random.default_rng(seed).normal(size=images.shape)
    assert (orientation_signs(images + direction, objective.tets) < 0).mean() > 0.2
    length = objective.largest_step(images, direction)
    assert 0 < length < 0.1
    assert (orientation_signs(images + length * direction, objective.tets) > 0).all()
    assert (orientation_signs(images + 1.2 * length * direction, objective.tets) < 0).any()


def test_crushing_a_body_to_a_point_stops_before_it(shell):
    """Closed form: along -x every tet vanishes at t = 1 (a triple root)."""
    mesh, _ = shell
    objective = objective_of(mesh)
    images = np.array(mesh.points)
    length = objective.largest_step(images, -images)
    assert length == pytest.approx(0.9, rel=1e-3)
    assert objective.is_valid(images - length * images)


def test_signs_with_a_margin(shell):
    mesh, _ = shell
    objective = objective_of(mesh)
    images = np.array(mesh.points)
    assert objective.is_valid(images)
    assert not objective.is_valid(images * (1, 1, -1))
    assert not objective.is_valid(images * (1, 1, 0))


@pytest.mark.parametrize("energy", ENERGIES)
def test_size_alone_costs_nothing(shell, energy):
    """Law: 1.3 times every length is no distortion of a body grown by 1.3 cubed."""
    mesh, _ = shell
    points = np.array(mesh.points)
    objective = Objective(points, np.array(mesh.tets), energy=energy, growth=1.3**3)
    grown = objective.value(1.3 * points, nothing())
    assert grown.distortion == pytest.approx(0.0, abs=1e-12)
    assert grown.smallest_ratio == pytest.approx(1.3**3)
    assert objective.value(points, nothing()).smallest_ratio == pytest.approx(1.0)


@pytest.mark.parametrize("energy", ENERGIES)
def test_the_order_of_bodies_of_different_size(shell, energy):
    """Law: with the growth taken out, both orders have one and the same total."""
    mesh, _ = shell
    images = np.ascontiguousarray(1.4 * wavy(mesh.points))
    growth = mesh.moved(images).volumes.sum() / mesh.volumes.sum()
    totals = []
    for here, there, ratio in ((mesh.points, images, growth), (images, mesh.points, 1 / growth)):
        objective = Objective(np.array(here), np.array(mesh.tets), energy=energy, growth=ratio)
        totals.append(objective.value(np.array(there), nothing()).distortion)
    assert totals[0] == pytest.approx(totals[1], rel=1e-10)


@pytest.mark.parametrize("energy", ENERGIES)
def test_total_distortion_of_the_inverse(shell, energy):
    """Law: V E(A -> B) = V' E(B -> A), each total divided by its own body's volume."""
    mesh, _ = shell
    images = np.ascontiguousarray(wavy(mesh.points))
    there, back = objective_of(mesh, energy), objective_of(mesh.moved(images), energy)
    forward = there.volume_mm3 * there.value(images, nothing()).distortion
    backward = back.volume_mm3 * back.value(np.array(mesh.points), nothing()).distortion
    assert forward == pytest.approx(backward, rel=1e-10)
    assert forward > 1.0
