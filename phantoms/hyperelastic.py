"""A compressible neo-Hookean solid with stress-free growth, solved by Newton's method.

Meshes, quadratic tetrahedra, quadrature and numbering are those of scikit-fem.  Energy per volume at
rest, with F = Fe g and J_g = g^3 the stress-free volume ratio (multiplicative growth, Rodriguez, Hoger
and McCulloch 1994):

    W = g^3 [ mu/2 (Fe:Fe - 3) - mu ln Je + lambda/2 (ln Je)^2 ]

(the logarithmic form of Bonet and Wood, Nonlinear Continuum Mechanics, 2008, section 6.4.3; both cited from
memory, derivatives recomputed and tested against finite differences).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csc_matrix
from scipy.sparse.linalg import splu
from skfem import Basis, ElementTetP2, MeshTet

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Solid:
    """A discretised solid at rest.

    Parameters
    ----------
    basis : skfem.Basis
        Scalar quadratic tetrahedra; coordinate i of node n is unknown ``3 n + i``.
    gradients : (e, q, 10, 3) float64, 1/mm
        Gradients of the shape functions at the quadrature points.
    weights : (e, q) float64, mm3
    unknowns : (e, 30) int64
    node_volumes : (n,) float64, mm3
        Integral of each node's shape function.
    """

    basis: Basis
    gradients: Array
    weights: Array
    unknowns: NDArray[np.int64]
    node_volumes: Array

    @classmethod
    def of_mesh(cls, mesh: MeshTet) -> Solid:
        """Quadratic tetrahedra on a mesh, with a quadrature exact to degree 4."""
        basis = Basis(mesh, ElementTetP2(), intorder=4)
        gradients = np.stack([np.moveaxis(f[0].grad, 0, -1) for f in basis.basis], axis=2)
        nodes = basis.element_dofs.T
        unknowns = (3 * nodes[:, :, None] + np.arange(3)).reshape(len(nodes), 30)
        weights = np.asarray(basis.dx)
        shares = np.stack([(np.asarray(f[0]) * weights).sum(axis=1) for f in basis.basis], axis=1)
        node_volumes: Array = np.bincount(nodes.ravel(), shares.ravel(), basis.N).astype(np.float64)
        return cls(basis, np.ascontiguousarray(gradients), weights, unknowns, node_volumes)

    @property
    def nodes(self) -> Array:
        """(n, 3) nodes at rest, mm."""
        return np.ascontiguousarray(self.basis.doflocs.T)

    @property
    def quadrature_points(self) -> Array:
        """(e, q, 3) mm."""
        return np.moveaxis(np.asarray(self.basis.global_coordinates()), 0, -1)

    def deformation(self, displacement: Array) -> Array:
        """(e, q, 3, 3) F at the quadrature points, for (n, 3) nodal displacements, mm."""
        nodal = displacement[self.basis.element_dofs.T]
        return np.asarray(np.eye(3) + np.einsum("eai,eqaj->eqij", nodal, self.gradients))


@dataclass(frozen=True)
class Material:
    """Stiffness and stress-free growth at the quadrature points, and the weight of the solid.

    Parameters
    ----------
    shear, lame : (e, q) float64, kPa
    growth : (e, q) float64
        Stress-free volume ratio J_g.
    weight : (3,) float64, kPa/mm
        Dead body force per volume at rest.
    """

    shear: Array
    lame: Array
    growth: Array
    weight: Array


def energy(solid: Solid, material: Material, displacement: Array) -> float:
    """Stored energy less the work of the weight, kPa mm3; infinite where a quadrature point is inverted."""
    F = solid.deformation(displacement)
    J = np.linalg.det(F) / material.growth
    if J.min() <= 0:
        return float("inf")
    squares = (F**2).sum(axis=(2, 3)) / material.growth ** (2 / 3)
    density = material.shear * (squares / 2 - 1.5 - np.log(J)) + material.lame / 2 * np.log(J) ** 2
    work = float(solid.node_volumes @ displacement @ material.weight)
    return float((solid.weights * material.growth * density).sum()) - work


def forces_and_stiffness(solid: Solid, material: Material, displacement: Array) -> tuple[Array, csc_matrix]:
    """First and second derivative of the energy with respect to the nodal displacements.

    Returns
    -------
    forces : (3 n,) float64
    stiffness : (3 n, 3 n) csc_matrix
        With h_a = F^-T grad N_a, block ab is the sum over quadrature points of
        ``g mu (grad N_a . grad N_b) I + J_g [(mu - lambda ln Je) h_b h_a^T + lambda h_a h_b^T]``.
    """
    F = solid.deformation(displacement)
    log_ratio = np.log(np.linalg.det(F) / material.growth)
    spatial = solid.gradients @ np.linalg.inv(F)
    length_weight = solid.weights * material.growth ** (1 / 3) * material.shear
    bulk_weight = solid.weights * material.growth
    pull = material.lame * log_ratio - material.shear
    local = np.einsum("eq,eqai,eqji->eaj", length_weight, solid.gradients, F, optimize=True)
    local += np.einsum("eq,eqaj->eaj", bulk_weight * pull, spatial)
    n_elements, n_points = solid.weights.shape
    flat = spatial.reshape(n_elements, n_points, 30)
    swapped = np.swapaxes(flat, 1, 2)
    blocks = swapped @ (flat * (bulk_weight * material.lame)[..., None])
    crossed = swapped @ (flat * (-bulk_weight * pull)[..., None])
    blocks += np.swapaxes(crossed.reshape(-1, 10, 3, 10, 3), 2, 4).reshape(-1, 30, 30)
    laplace = np.einsum("eq,eqai,eqbi->eab", length_weight, solid.gradients, solid.gradients, optimize=True)
    blocks += np.einsum("eab,ij->eaibj", laplace, np.eye(3)).reshape(-1, 30, 30)
    forces, stiffness = _assembled(solid, local.reshape(-1, 30), blocks)
    return forces - np.outer(solid.node_volumes, material.weight).ravel(), stiffness


def _assembled(solid: Solid, local: Array, blocks: Array) -> tuple[Array, csc_matrix]:
    n = 3 * solid.basis.N
    forces: Array = np.bincount(solid.unknowns.ravel(), local.ravel(), n).astype(np.float64)
    rows = np.repeat(solid.unknowns, 30, axis=1).ravel()
    columns = np.tile(solid.unknowns, (1, 30)).ravel()
    return forces, coo_matrix((blocks.ravel(), (rows, columns)), shape=(n, n)).tocsc()


def equilibrium(
    solid: Solid,
    material: Material,
    start: Array,
    *,
    held: NDArray[np.int64],
    held_displacement: Array,
    tolerance: float = 1e-9,
    max_steps: int = 30,
    report: Callable[[int, float], None] | None = None,
) -> Array:
    """Displacements at which the free nodes carry no force.

    Parameters
    ----------
    solid, material
    start : (n, 3) float64, mm
        A state near the answer; its free nodes should not be inverted once the held ones move.
    held : (h,) int64
        Nodes whose displacement is prescribed.
    held_displacement : (h, 3) float64, mm
    tolerance : float
        Force on the free nodes, relative to all nodal forces.
    max_steps : int
    report : callable, optional
        Told each Newton step and its relative force.

    Returns
    -------
    (n, 3) float64, mm

    Raises
    ------
    ArithmeticError
        No convergence within `max_steps`, or no admissible step.
    """
    free = np.setdiff1d(np.arange(3 * solid.basis.N), (3 * held[:, None] + np.arange(3)).ravel())
    state = start.copy()
    jump = np.zeros_like(start)
    jump[held] = held_displacement - start[held]
    for step in range(max_steps):
        forces, stiffness = forces_and_stiffness(solid, material, state)
        residual = float(np.abs(forces[free]).max() / max(np.abs(forces).max(), 1e-30))
        if report is not None:
            report(step, residual)
        if residual < tolerance and not jump.any():
            return state
        load = forces + stiffness @ jump.ravel()
        change = jump.ravel().copy()
        change[free] = -_factored(stiffness[free][:, free]).solve(load[free])
        state = state + _step_length(solid, material, state, change.reshape(-1, 3)) * change.reshape(-1, 3)
        jump = np.zeros_like(start)
        jump[held] = held_displacement - state[held]
    raise ArithmeticError(f"no equilibrium after {max_steps} Newton steps, relative force {residual:.1e}")


def _factored(matrix: csc_matrix) -> splu:
    return splu(
        matrix.tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True}
    )


def _step_length(solid: Solid, material: Material, state: Array, change: Array) -> float:
    """The longest of 1, 1/2, 1/4 ... that inverts nothing.

    Raises
    ------
    ArithmeticError
        When even 1/1024 does.
    """
    for halvings in range(11):
        length = 0.5**halvings
        if np.isfinite(energy(solid, material, state + length * change)):
            return length
    raise ArithmeticError("every step inverts an element")
