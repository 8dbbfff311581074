"""Make the stored motion of the gel column again: ``python -m volmap_phantoms.simulate [FILE]``.

Solves the rig's three load steps (`column.LOADS`) with quadratic tetrahedra (`hyperelastic`), then keeps
the nodal displacements on the mesh refined once, whose points are the nodes.  The stored motion is
the piecewise affine one on that mesh: it is the truth, exactly, and its inverse is a point location.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree
from skfem import MeshTet

from . import column
from .hyperelastic import Material, Solid, equilibrium
from .simulation import DATA, Simulation, store

CELLS = (6, 6, 15)
SUBSTEPS = 3


def rest_mesh(cells: tuple[int, int, int]) -> MeshTet:
    """The column at rest: a box of tets, bent into a rounded, irregular body.

    Parameters
    ----------
    cells : tuple of 3 int
        Cells across, deep and high; each becomes six tets.
    """
    axes = [np.linspace(-1.0, 1.0, n + 1) for n in cells[:2]] + [np.linspace(0.0, 1.0, cells[2] + 1)]
    box = MeshTet.init_tensor(*axes)
    return MeshTet(np.ascontiguousarray(column.rest_shape(box.p.T).T), box.t)


def material_under(solid: Solid, load: column.LoadStep) -> Material:
    """Stiffness and growth at the quadrature points, by the inclusion each lies in, and the weight."""
    labels = column.labels_at(solid.quadrature_points)
    shear_of = np.array([0.0, *(column.SHEAR_KPA[k] for k in sorted(column.SHEAR_KPA))])
    growth_of = np.array([1.0, *(load.growth.get(k, 1.0) for k in sorted(column.SHEAR_KPA))])
    shear = shear_of[labels]
    weight = np.array(load.weight_kpa_per_mm)
    return Material(shear, column.LAME_OVER_SHEAR * shear, growth_of[labels], weight)


def simulated(
    cells: tuple[int, int, int] = CELLS,
    *,
    substeps: int = SUBSTEPS,
    report: Callable[[int, float], None] | None = None,
) -> Simulation:
    """Run the rig: rest and the three load steps.

    Parameters
    ----------
    cells : tuple of 3 int
        Cells of `rest_mesh`.
    substeps : int
        Load increments between two visits.
    report : callable, optional
        Told each Newton step and its relative force.
    """
    mesh = rest_mesh(cells)
    solid = Solid.of_mesh(mesh)
    foot, top = _ends(solid, mesh, cells)
    held = np.concatenate([foot, top])
    states = [np.zeros((solid.basis.N, 3))]
    for before, after in zip((column.REST, *column.LOADS[:-1]), column.LOADS, strict=True):
        state = states[-1]
        for part in range(1, substeps + 1):
            load = before.between(after, part / substeps)
            ends = (
                column.foot_motion(solid.nodes[foot], load),
                column.top_motion(solid.nodes[top], load),
            )
            moved = np.concatenate(ends)
            state = equilibrium(
                solid, material_under(solid, load), state, held=held, held_displacement=moved, report=report
            )
        states.append(state)
    return _on_refined(mesh, solid, np.array(states))


def _ends(
    solid: Solid, mesh: MeshTet, cells: tuple[int, int, int]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Nodes glued to the foot plate and to the top plate, by their place in the box the mesh came from."""
    box = MeshTet.init_tensor(*(np.linspace(0, 1, n + 1) for n in cells))
    nodes = []
    for level in (0.0, 1.0):
        facets = box.facets_satisfying(lambda x, at=level: np.isclose(x[2], at), boundaries_only=True)
        nodes.append(np.asarray(solid.basis.get_dofs(facets).flatten(), np.int64))
    assert np.array_equal(box.t, mesh.t)
    return nodes[0], nodes[1]


def _on_refined(mesh: MeshTet, solid: Solid, states: NDArray[np.float64]) -> Simulation:
    """The nodal displacements as a piecewise affine motion of the mesh refined once."""
    fine = mesh.refined()
    distance, node = cKDTree(solid.nodes).query(fine.p.T)
    assert distance.max() < 1e-9
    tets = np.asarray(fine.t.T, np.int64)
    corners = fine.p.T[tets]
    negative = np.linalg.det(corners[:, 1:] - corners[:, :1]) < 0
    tets[negative] = tets[negative][:, [0, 2, 1, 3]]
    return Simulation(np.ascontiguousarray(fine.p.T), tets, states[:, node])


def main() -> None:
    """Entry of ``python -m volmap_phantoms.simulate``."""
    file = Path(sys.argv[1]) if len(sys.argv) > 1 else DATA
    simulation = simulated(
        report=lambda step, force: print(f"Newton step {step}, relative force {force:.1e}")
    )
    store(simulation, file)
    print(f"{len(simulation.points)} points, {len(simulation.tets)} tets -> {file}")


if __name__ == "__main__":
    main()
