"""The finite-element solid against closed forms, finite differences and published values."""

import numpy as np
import pytest
from skfem import MeshTet
from volmap_phantoms.hyperelastic import Material, Solid, energy, equilibrium, forces_and_stiffness

AFFINE = np.array([[1.2, 0.15, -0.05], [0.1, 0.9, 0.2], [0.0, -0.1, 1.1]])


@pytest.fixture(scope="module")
def cube():
    mesh = MeshTet.init_tensor(*(np.linspace(0, 1, 3) for _ in range(3)))
    return Solid.of_mesh(mesh)


def uniform(solid, *, shear=1.0, lame=1.5, growth=1.0, weight=(0.0, 0.0, 0.0)):
    full = np.ones_like(solid.weights)
    return Material(shear * full, lame * full, growth * full, np.array(weight))


def outer_nodes(solid):
    return np.flatnonzero((np.isclose(solid.nodes, 0) | np.isclose(solid.nodes, 1)).any(axis=1))


def test_patch_affine_boundary_gives_affine_interior(cube):
    # patch test (outside checks): affine data on the boundary, affine everywhere, for every isotropic energy
    target = cube.nodes @ (AFFINE - np.eye(3)).T
    held = outer_nodes(cube)
    found = equilibrium(cube, uniform(cube), np.zeros_like(target), held=held, held_displacement=target[held])
    assert len(held) < len(cube.nodes)
    assert found == pytest.approx(target, abs=1e-9)


def test_uniaxial_stretch_of_the_published_bar(cube):
    # log neo-Hookean, mu 1, lambda 1.5, stretch 2: lateral 0.798078, nominal stress 1.681536 (outside checks)
    stretch = np.diag([2.0, 0.798078, 0.798078])
    forces, _ = forces_and_stiffness(cube, uniform(cube), cube.nodes @ (stretch - np.eye(3)))
    forces = forces.reshape(-1, 3)
    end = np.isclose(cube.nodes[:, 0], 1)
    assert forces[end, 0].sum() == pytest.approx(1.681536, abs=1e-5)
    assert forces[:, 1:] == pytest.approx(0, abs=1e-6)


def test_free_growth_carries_no_force(cube):
    # law: a body free to swell by J_g = 1.2 does so, without stress
    swollen = cube.nodes * (1.2 ** (1 / 3) - 1)
    forces, _ = forces_and_stiffness(cube, uniform(cube, growth=1.2), swollen)
    assert forces == pytest.approx(0, abs=1e-12)
    assert energy(cube, uniform(cube, growth=1.2), swollen) == pytest.approx(0, abs=1e-12)


def test_derivatives_by_finite_differences(cube):
    # slow twin: central differences of the energy, and of the forces
    random = np.random.default_rng(0)
    material = Material(*random.uniform(0.8, 1.2, (3, *cube.weights.shape)), np.array([0.1, -0.2, 0.3]))
    state = cube.nodes @ (AFFINE - np.eye(3)).T + 0.01 * random.standard_normal(cube.nodes.shape)
    way, step = random.standard_normal(state.shape), 1e-5
    forces, stiffness = forces_and_stiffness(cube, material, state)
    ends = [energy(cube, material, state + s * way) for s in (step, -step)]
    assert forces @ way.ravel() == pytest.approx((ends[0] - ends[1]) / (2 * step), rel=1e-7)
    force_ends = [forces_and_stiffness(cube, material, state + s * way)[0] for s in (step, -step)]
    assert stiffness @ way.ravel() == pytest.approx((force_ends[0] - force_ends[1]) / (2 * step), abs=1e-6)
    assert abs(stiffness - stiffness.T).max() < 1e-12


def test_the_foot_carries_the_weight(cube):
    # law: forces of the held nodes balance the weight, volume 1 times 0.05 kPa/mm
    material = uniform(cube, weight=(0.0, 0.0, -0.05))
    foot = np.flatnonzero(np.isclose(cube.nodes[:, 2], 0))
    rest = np.zeros_like(cube.nodes)
    found = equilibrium(cube, material, rest, held=foot, held_displacement=rest[foot])
    reaction = forces_and_stiffness(cube, material, found)[0].reshape(-1, 3)[foot].sum(axis=0)
    assert reaction == pytest.approx([0, 0, 0.05], abs=1e-9)
    assert found[:, 2].min() < -1e-3


def test_inverted_states_have_infinite_energy(cube):
    assert energy(cube, uniform(cube), cube.nodes @ np.diag([-2.0, 0, 0])) == np.inf
