"""What is minimised: distortion of all tets, boundary matches and guides."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from volmap.kernels import blocksystem, distortion, observations, steps, tets
from volmap.kernels.energies import ENERGIES
from volmap.kernels.observations import Observations
from volmap.kernels.ties import no_ties
from volmap.mapping.contact import Contact
from volmap.mapping.multigrid import Multigrid

Floats = NDArray[np.float64]

SAFETY = 0.9  # of the largest step that keeps every tet positive
ARMIJO = 1e-4
SMALLEST_STEP = 1e-6
LINEAR_ITERATIONS = 400  # at most, a Newton step


@dataclass(frozen=True, eq=False)
class Value:
    """Total objective and its distortion part, both infinite where a tet is not positive; the smallest J."""

    total: float
    distortion: float
    smallest_ratio: float = np.nan


@dataclass(frozen=True, eq=False)
class Step:
    """Where a Newton step led: images, value there, share of it taken, linear iterations it took."""

    images: Floats
    value: Value
    length: float
    iterations: int


class Objective:
    """``(1/V) sum v_t W_S(F_t) + pulls`` over the image points of a mesh.

    Parameters
    ----------
    points : (n, 3) float64, mm
        Of the source mesh.
    mesh_tets : (m, 4) int64
    energy : str
    contact : Contact, optional
        Keeps the image of the outer boundary from crossing itself.
    growth : float
        Volume of the target body over that of the source.  Distortion is measured against the source
        enlarged to the target's volume, so that size alone costs nothing: otherwise a soft boundary would
        let a grown body shrink back, and the total would depend on which body came first.
    """

    def __init__(
        self,
        points: Floats,
        mesh_tets: NDArray[np.int64],
        *,
        energy: str,
        contact: Contact | None = None,
        growth: float = 1.0,
    ) -> None:
        n, m = len(points), len(mesh_tets)
        self.code = ENERGIES[energy]
        self.tets = mesh_tets
        self.pattern = blocksystem.pattern_of(mesh_tets, n)
        self.contact = contact
        self.ties = no_ties()
        self.growth = growth
        rest = np.cbrt(growth) * points
        self.shape_gradients = tets.shape_gradients(rest, mesh_tets)
        volumes = tets.signed_volumes(rest, mesh_tets)
        self.volume_mm3 = float(volumes.sum())
        self.weights = volumes / self.volume_mm3
        self.densities = np.empty(m)
        self.forces, self.blocks = np.empty((m, 4, 3)), np.empty((m, 6, 3, 3), np.float32)
        self.gradient = np.empty((n, 3))
        blocks = np.empty((len(self.pattern.row_column), 3, 3), np.float32)
        self.matrix = sparse.bsr_matrix(
            (blocks, self.pattern.row_column, self.pattern.row_start), shape=(3 * n, 3 * n)
        )
        a, b = self.pattern.edges.T
        edge_mm = float(np.linalg.norm(points[a] - points[b], axis=1).mean())
        self.multigrid = Multigrid(points, edge_mm)

    def value(self, images: Floats, pulls: Observations) -> Value:
        """The objective at image points (n, 3) mm."""
        smallest = distortion.energies(self.code, images, self.tets, self.shape_gradients, self.densities)
        spent = float(self.weights @ self.densities)
        total = spent + observations.misfit(pulls, images)
        if self.contact is not None and np.isfinite(total):
            total += self.contact.energy(images)
        return Value(total, spent, float(smallest) * self.growth)

    def differentiate(self, images: Floats, pulls: Observations) -> Value:
        """The objective, with its gradient and convex second-derivative model kept for `newton_step`."""
        distortion.derivatives(
            self.code,
            images,
            self.tets,
            self.shape_gradients,
            self.weights,
            True,
            self.densities,
            self.forces,
            self.blocks,
        )
        blocksystem.gather(self.pattern, self.forces, self.blocks, self.gradient, self.matrix.data)
        pulled = observations.add_pull(pulls, images, self.pattern, self.gradient, self.matrix.data)
        spent = float(self.weights @ self.densities)
        if self.contact is None:
            return Value(spent + pulled, spent)
        repelled, self.ties = self.contact.add(images, self.gradient)
        return Value(spent + pulled + repelled, spent)

    def descend(self, images: Floats, pulls: Observations, *, at: Value, forcing: float) -> Step:
        """One Newton step from where `differentiate` gave `at`, as long as it may and pays.

        Parameters
        ----------
        forcing : float
            Relative residual of the linear solve.
        """
        direction, slope, iterations = self.newton_step(tolerance=forcing, most=LINEAR_ITERATIONS)
        length = self.largest_step(images, direction)
        while length > SMALLEST_STEP:
            trial = images + length * direction
            value = self.value(trial, pulls)
            if value.total <= at.total + ARMIJO * length * slope:
                return Step(trial, value, length, iterations)
            length *= 0.5
        return Step(images, self.value(images, pulls), 0.0, iterations)

    def newton_step(self, *, tolerance: float, most: int) -> tuple[Floats, float, int]:
        """Direction (n, 3) mm, its slope (negative), and the linear iterations it took."""
        direction, iterations = self.multigrid.solve(
            self.matrix, self.ties, -self.gradient, tolerance=tolerance, most=most
        )
        return direction, float((self.gradient * direction).sum()), iterations

    def largest_step(self, images: Floats, direction: Floats) -> float:
        """Largest step in [0, 1] that surely keeps every tet positive and the boundary free of crossings."""
        bounds = self.densities  # work space of the right size
        steps.step_bounds(images, direction, self.tets, 1.0 / SAFETY, bounds)
        length = min(1.0, SAFETY * float(bounds.min()))
        if self.contact is not None:
            length *= self.contact.longest_step(images, length * direction)
        return length

    def is_valid(self, images: Floats) -> bool:
        """True when every tet is positive by a margin and, with contact, the outer boundary is embedded."""
        volumes = tets.signed_volumes(images, self.tets)
        if not (volumes > distortion.FLAT * self.weights * self.volume_mm3).all():
            return False
        return self.contact is None or not self.contact.crosses(images)
