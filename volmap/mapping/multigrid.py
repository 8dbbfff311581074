"""Conjugate gradients whose iterations hardly grow in number with the mesh: geometric multigrid on lattices.

Coarse unknowns live on regular lattices around the body, each twice as wide as the one before.  A point takes
its value from the four corners of its simplex in Kuhn's subdivision of the lattice's cubes (Kuhn, IBM J. Res.
Dev. 4(5), 1960), which carries every rigid motion exactly; coarse matrices are Galerkin products.  One
V-cycle with damped block Jacobi is the preconditioner (Briggs, Henson & McCormick, A Multigrid Tutorial,
2000).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.linalg import SuperLU, splu

from volmap.kernels.blocksystem import multiply
from volmap.kernels.ties import Ties, add_diagonal, add_product

Floats = NDArray[np.float64]

FIRST_SPACING = 2.0  # of the finest lattice, in mean edges of the mesh
FEW_POINTS = 150  # solved directly
SMALLEST_WEIGHT = 1e-3  # of a lattice node in a point; less is left out
DAMPING = 0.5  # tets, pulls and ties touch 4 points at most, so no eigenvalue of D^-1 A exceeds 4
POWER_ROUNDS = 10  # to find the largest eigenvalue of a coarse level
SHIFT = 1e-5  # added to the coarsest diagonal (share of it): nodes beyond the body may make it singular
STRIP = 4000  # coarse points whose rows are multiplied out at a time
WORN = 1.5  # times the iterations of a new preconditioner: time for another


def lattice_weights(points: Floats, spacing_mm: float) -> tuple[sparse.csr_matrix, Floats]:
    """Linear interpolation from a lattice to points.

    Parameters
    ----------
    points : (n, 3) float64, mm
    spacing_mm : float

    Returns
    -------
    weights : (n, k) sparse float32
        Rows sum to one.
    nodes : (k, 3) float64, mm
        The lattice's nodes that some point uses.
    """
    origin = points.min(axis=0) - 0.01 * spacing_mm
    place = (points - origin) / spacing_mm
    share, order = place - np.floor(place), np.empty(points.shape, np.int64)
    order = np.argsort(-share, axis=1, kind="stable")
    falling = np.take_along_axis(share, order, axis=1)
    weight = -np.diff(falling, axis=1, prepend=1.0, append=0.0)
    corner = np.repeat(np.floor(place).astype(np.int64)[:, None], 4, axis=1)
    for k in range(3):  # from corner to corner along the axis with the next largest share
        corner[np.arange(len(points))[:, None], np.arange(k + 1, 4), order[:, k, None]] += 1
    weight[weight < SMALLEST_WEIGHT] = 0.0
    weight /= weight.sum(axis=1, keepdims=True)
    counts = corner.max(axis=(0, 1)) + 1
    point, slot = np.nonzero(weight)
    keys = np.ravel_multi_index(tuple(corner[point, slot].T), tuple(counts))
    used, column = np.unique(keys, return_inverse=True)
    values = weight[point, slot].astype(np.float32)
    weights = sparse.csr_matrix((values, (point, column)), shape=(len(points), len(used)))
    return weights, np.stack(np.unravel_index(used, tuple(counts)), axis=1) * spacing_mm + origin


def _inverted(blocks: Floats) -> Floats:
    """Inverse of each 3x3 block, (n, 3, 3); those that are nearly flat are thickened."""
    thicker = 1e-6 * np.trace(blocks, axis1=1, axis2=2)[:, None, None] * np.eye(3)
    return np.asarray(np.linalg.inv(blocks + thicker))


def _own_blocks(matrix: sparse.bsr_matrix) -> Floats:
    row = np.repeat(np.arange(len(matrix.indptr) - 1), np.diff(matrix.indptr))
    return np.asarray(matrix.data[row == matrix.indices], np.float64)


def _rows(matrix: sparse.bsr_matrix, rows: NDArray[np.int32]) -> sparse.bsr_matrix:
    """Some block rows of a matrix."""
    counts = np.diff(matrix.indptr)[rows]
    start = np.concatenate([[0], np.cumsum(counts)])
    take = np.repeat(matrix.indptr[rows] - start[:-1], counts) + np.arange(start[-1])
    parts = (matrix.data[take], matrix.indices[take], start)
    return sparse.bsr_matrix(parts, shape=(3 * len(rows), matrix.shape[1]))


def coarse_matrix(matrix: sparse.bsr_matrix, transfer: sparse.bsr_matrix, *, strip: int) -> sparse.bsr_matrix:
    """``P^T A P`` of a transfer P, some coarse rows after others, because all of ``A P`` is large.

    Parameters
    ----------
    matrix : (3 n, 3 n) sparse of 3x3 blocks
    transfer : (3 n, 3 k) sparse of 3x3 blocks
    strip : int
        Coarse points at a time; the result does not depend on it, to the last bit.
    """
    back = transfer.T
    parts = []
    for first in range(0, back.shape[0] // 3, strip):
        start = back.indptr[first : first + strip + 1]
        inside = slice(start[0], start[-1])
        rows, place = np.unique(back.indices[inside], return_inverse=True)
        shape = (3 * (len(start) - 1), 3 * len(rows))
        here = sparse.bsr_matrix((back.data[inside], place, start - start[0]), shape=shape)
        parts.append(here @ (_rows(matrix, rows) @ transfer))
    counts = np.concatenate([np.diff(p.indptr) for p in parts])
    blocks = np.concatenate([p.data for p in parts])
    columns = np.concatenate([p.indices for p in parts])
    start = np.concatenate([[0], np.cumsum(counts)])
    return sparse.bsr_matrix((blocks, columns, start), shape=(back.shape[0], transfer.shape[1]))


@dataclass(frozen=True, eq=False)
class _Level:
    """A matrix, and what one sweep of damped block Jacobi needs."""

    matrix: sparse.bsr_matrix
    smoother: Floats  # damped inverses of its own blocks
    ties: Ties | None = None

    def times(self, x: Floats) -> Floats:
        out = np.empty_like(x)
        multiply(self.matrix.indptr, self.matrix.indices, self.matrix.data, x, out)
        if self.ties is not None:
            add_product(self.ties, x, out)
        return out

    def smoothed(self, residual: Floats) -> Floats:
        return np.asarray(np.einsum("nij,nj->ni", self.smoother, residual))

    @staticmethod
    def of(matrix: sparse.bsr_matrix) -> _Level:
        """A coarse level, damped by its own largest eigenvalue."""
        plain = _Level(matrix, _inverted(_own_blocks(matrix)))
        x = np.cos(np.arange(matrix.shape[0], dtype=np.float64)).reshape(-1, 3)
        largest = 1.0
        for _ in range(POWER_ROUNDS):
            x = plain.smoothed(plain.times(x))
            largest = float(np.sqrt((x * x).sum()))
            x /= largest
        return _Level(matrix, plain.smoother * min(DAMPING, 1.6 / largest))


class Multigrid:
    """Preconditioner for the matrices of one mesh.

    Parameters
    ----------
    points : (n, 3) float64, mm
        Of the mesh.
    edge_mm : float
        Mean edge of the mesh.
    """

    def __init__(self, points: Floats, edge_mm: float) -> None:
        self.transfers: list[sparse.csr_matrix] = []
        self._blockwise: list[sparse.bsr_matrix] = []
        spacing = FIRST_SPACING * edge_mm
        while len(points) > FEW_POINTS:
            weights, nodes = lattice_weights(points, spacing)
            if len(nodes) > 0.7 * len(points):
                spacing *= 2.0  # thinner than the lattice: the next one
                continue
            self.transfers.append(weights)
            blocks = weights.data[:, None, None] * np.eye(3, dtype=np.float32)
            self._blockwise.append(sparse.bsr_matrix((blocks, weights.indices, weights.indptr)))
            points, spacing = nodes, 2.0 * spacing
        self._restrictions = [t.T.tocsr() for t in self.transfers]
        self._coarse: list[_Level] = []
        self._factor: SuperLU | None = None
        self._fresh = 0  # iterations with new coarse matrices; 0: they are to be renewed

    def forget(self) -> None:
        """Make coarse matrices anew at the next call, so that it does not hang on earlier ones."""
        self._fresh = 0

    def _renew(self, matrix: sparse.bsr_matrix) -> None:
        self._coarse = []
        for transfer in self._blockwise:
            matrix = coarse_matrix(matrix, transfer, strip=STRIP)
            self._coarse.append(_Level.of(matrix))
        coarsest = sparse.csc_matrix(matrix, dtype=np.float64)
        coarsest.setdiag(coarsest.diagonal() * (1.0 + SHIFT))
        self._factor = splu(coarsest, options={"SymmetricMode": True})

    def _cycle(self, levels: list[_Level], depth: int, right: Floats) -> Floats:
        if depth == len(self.transfers):
            assert self._factor is not None
            return np.asarray(self._factor.solve(right.ravel())).reshape(-1, 3)
        level = levels[depth]
        x = level.smoothed(right)
        coarse = self._restrictions[depth] @ (right - level.times(x))
        x += self.transfers[depth] @ self._cycle(levels, depth + 1, coarse)
        return x + level.smoothed(right - level.times(x))

    def solve(
        self, matrix: sparse.bsr_matrix, ties: Ties, right: Floats, *, tolerance: float, most: int
    ) -> tuple[Floats, int]:
        """Solve a symmetric positive system to a relative residual.

        Coarse matrices are kept from one call to the next until they no longer fit.

        Parameters
        ----------
        matrix : (3 n, 3 n) sparse of 3x3 blocks
        ties : Ties
            Stiffness beside the edges of the mesh; part of the system.
        right : (n, 3) float64
        tolerance : float
            Wanted ``|r| / |right|``.
        most : int
            Iterations at most.

        Returns
        -------
        x : (n, 3) float64
        iterations : int
        """
        if not self._fresh:
            self._renew(matrix)
        own = _own_blocks(matrix)
        add_diagonal(ties, own)
        fine = _Level(matrix, DAMPING * _inverted(own), ties)
        levels = [fine, *self._coarse]
        x, iterations = conjugate_gradients(
            fine.times, lambda r: self._cycle(levels, 0, r), right, tolerance=tolerance, most=most
        )
        if not self._fresh:
            self._fresh = max(iterations, 1)
        elif iterations > WORN * self._fresh + 1:
            self._fresh = 0
        return x, iterations


def _dot(a: Floats, b: Floats) -> float:
    return float(np.einsum("ij,ij->", a, b))


def conjugate_gradients(
    times: Callable[[Floats], Floats],
    precondition: Callable[[Floats], Floats],
    right: Floats,
    *,
    tolerance: float,
    most: int,
) -> tuple[Floats, int]:
    """Solve ``A x = right`` from x = 0 (Hestenes & Stiefel, J. Res. NBS 49, 1952); x and iterations done."""
    x, residual = np.zeros_like(right), right.copy()
    z = precondition(residual)
    direction, rz = z, _dot(residual, z)
    goal = tolerance**2 * _dot(right, right)
    for k in range(most):
        if _dot(residual, residual) <= goal or rz <= 0.0:
            return x, k
        product = times(direction)
        curvature = _dot(direction, product)
        if curvature <= 0.0:
            return x, k
        x += rz / curvature * direction
        residual -= rz / curvature * product
        z = precondition(residual)
        before, rz = rz, _dot(residual, z)
        direction = z + rz / before * direction
    return x, most
