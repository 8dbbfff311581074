"""Stiffness between points that no edge of the mesh joins: one direction, up to four points a tie."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import kernel


class Ties(NamedTuple):
    """Rank-one terms ``stiffness (n . sum_c weight_c x_c)^2`` of a quadratic model.

    Parameters
    ----------
    corners : (k, 4) int64
    weights : (k, 4) float64
    normals : (k, 3) float64
        Unit directions.
    stiffness : (k,) float64
        Twice the factor of the square, that is the second derivative along the direction.
    """

    corners: NDArray[np.int64]
    weights: NDArray[np.float64]
    normals: NDArray[np.float64]
    stiffness: NDArray[np.float64]


def no_ties() -> Ties:
    """An empty set."""
    return Ties(np.empty((0, 4), np.int64), np.empty((0, 4)), np.empty((0, 3)), np.empty(0))


@kernel
def add_product(ties, x, out):  # type: ignore[no-untyped-def]
    """out += K x, both (n, 3)."""
    for k in range(len(ties.stiffness)):
        along = 0.0
        for c in range(4):
            p = ties.corners[k, c]
            along += ties.weights[k, c] * (
                ties.normals[k, 0] * x[p, 0] + ties.normals[k, 1] * x[p, 1] + ties.normals[k, 2] * x[p, 2]
            )
        along *= ties.stiffness[k]
        for c in range(4):
            p = ties.corners[k, c]
            for i in range(3):
                out[p, i] += ties.weights[k, c] * along * ties.normals[k, i]


@kernel
def add_diagonal(ties, diagonal):  # type: ignore[no-untyped-def]
    """diagonal += the diagonal blocks of K, (n, 3, 3); for a preconditioner."""
    for k in range(len(ties.stiffness)):
        for c in range(4):
            p = ties.corners[k, c]
            factor = ties.stiffness[k] * ties.weights[k, c] * ties.weights[k, c]
            for i in range(3):
                for j in range(3):
                    diagonal[p, i, j] += factor * ties.normals[k, i] * ties.normals[k, j]
