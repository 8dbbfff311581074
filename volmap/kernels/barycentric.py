"""Barycentric coordinates as an affine function of the place, one table for all tets."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from volmap.kernels.compiled import kernel

# How far below zero a coordinate may be before a point counts as outside: rounding, not geometry.
INSIDE = -1e-9


def plain(values: ArrayLike, dtype: DTypeLike) -> NDArray[Any]:
    """The array itself, or a writable C-contiguous copy: the one kind that kernels are compiled for."""
    return np.require(values, dtype, ["C", "W"])


@kernel
def barycentric_rows(points, tets):  # type: ignore[no-untyped-def]
    """Tables from which the coordinates of any place follow.

    With row r of tet t: coordinate ``1 + r`` at x is ``rows[t, r, :3] . (x - rows[t, 3, :3])`` and
    coordinate 0 is one minus the other three.

    Parameters
    ----------
    points : (n, 3) float64
    tets : (m, 4) int64

    Returns
    -------
    rows : (m, 4, 3) float64
        Gradients of coordinates 1, 2, 3, then the first corner.  NaN for a tet without volume, so that
        every comparison with it is false.
    """
    rows = np.empty((tets.shape[0], 4, 3))
    for t in range(tets.shape[0]):
        edges = np.empty((3, 3))
        for r in range(3):
            for d in range(3):
                edges[r, d] = points[tets[t, r + 1], d] - points[tets[t, 0], d]
        for r in range(3):
            a, b = (r + 1) % 3, (r + 2) % 3
            for d in range(3):
                e, f = (d + 1) % 3, (d + 2) % 3
                rows[t, r, d] = edges[a, e] * edges[b, f] - edges[a, f] * edges[b, e]
            rows[t, 3, r] = points[tets[t, 0], r]
        determinant = 0.0
        for d in range(3):
            determinant += edges[0, d] * rows[t, 0, d]
        scale = 1.0 / determinant if determinant != 0.0 else np.nan
        for r in range(3):
            for d in range(3):
                rows[t, r, d] *= scale
    return rows
