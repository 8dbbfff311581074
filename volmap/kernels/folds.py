"""Folds of a sampled field: ten determinants a cube of eight voxels.

A cube's eight corner tets (forward and backward differences in every combination) and its two central
tets must all keep their orientation; a central difference cannot see a fold (Liu, Chen, Wei, Carass &
Prince, On finite difference Jacobian computation in deformable image registration, 2022).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

# Corners of a cube as bits (i, j, k) = (4, 2, 1); each row a positive tet of the undeformed cube.
TEN_TETS = np.array(
    [
        [0, 4, 2, 1],
        [4, 0, 5, 6],
        [2, 0, 6, 3],
        [1, 0, 3, 5],
        [3, 1, 2, 7],
        [5, 4, 1, 7],
        [6, 2, 4, 7],
        [7, 6, 5, 3],
        [0, 6, 3, 5],
        [7, 1, 2, 4],
    ],
    np.int64,
)


@inner_kernel
def _determinant(y, a, b, c, d):  # type: ignore[no-untyped-def]
    """det[b - a, c - a, d - a] of four rows of y."""
    px, py, pz = y[b, 0] - y[a, 0], y[b, 1] - y[a, 1], y[b, 2] - y[a, 2]
    qx, qy, qz = y[c, 0] - y[a, 0], y[c, 1] - y[a, 1], y[c, 2] - y[a, 2]
    rx, ry, rz = y[d, 0] - y[a, 0], y[d, 1] - y[a, 1], y[d, 2] - y[a, 2]
    return px * (qy * rz - qz * ry) - py * (qx * rz - qz * rx) + pz * (qx * ry - qy * rx)


@kernel
def smallest_determinants(first, last, displacement, axes, found):  # type: ignore[no-untyped-def]
    """Smallest of the ten determinants of every cube, as a volume ratio.

    Parameters
    ----------
    first, last : int
        Planes to fill.
    displacement : (I, J, K, 3) float32, mm
        NaN where undefined.
    axes : (3, 3) float64, mm
        Linear part of the grid's affine; its determinant, sign included, is divided out.
    found : (I - 1, J - 1, K - 1) float64
        Filled: 1 for the identity; the two central tets are halved, being twice as large.  NaN where a
        corner is undefined.
    """
    volume = (
        axes[0, 0] * (axes[1, 1] * axes[2, 2] - axes[1, 2] * axes[2, 1])
        - axes[0, 1] * (axes[1, 0] * axes[2, 2] - axes[1, 2] * axes[2, 0])
        + axes[0, 2] * (axes[1, 0] * axes[2, 1] - axes[1, 1] * axes[2, 0])
    )
    y = np.empty((8, 3))
    for i in range(first, last):
        for j in range(found.shape[1]):
            for k in range(found.shape[2]):
                found[i, j, k] = np.nan
                whole = True
                for corner in range(8):
                    if np.isnan(
                        displacement[i + (corner >> 2), j + ((corner >> 1) & 1), k + (corner & 1), 0]
                    ):
                        whole = False
                        break
                if not whole:
                    continue
                for corner in range(8):
                    a, b, c = corner >> 2, (corner >> 1) & 1, corner & 1
                    for d in range(3):
                        u = displacement[i + a, j + b, k + c, d]
                        y[corner, d] = axes[d, 0] * a + axes[d, 1] * b + axes[d, 2] * c + u
                smallest = np.inf
                for t in range(10):
                    size = volume if t < 8 else 2.0 * volume
                    a, b, c, d = TEN_TETS[t, 0], TEN_TETS[t, 1], TEN_TETS[t, 2], TEN_TETS[t, 3]
                    smallest = min(smallest, _determinant(y, a, b, c, d) / size)
                found[i, j, k] = smallest


def cube_determinants(displacement: NDArray[np.float32], affine: NDArray[np.float64]) -> NDArray[np.float64]:
    """Smallest of the ten determinants of every cube of eight voxels (see `smallest_determinants`).

    Parameters
    ----------
    displacement : (I, J, K, 3) float32, mm, world components
    affine : (4, 4) float64
        Of the grid; may be left-handed.
    """
    u = np.ascontiguousarray(displacement, np.float32).view()
    u.setflags(write=False)  # one kind of array for the kernel, without a copy of a big field
    found = np.empty(tuple(max(n - 1, 0) for n in u.shape[:3]))
    on_threads(smallest_determinants, len(found), u, np.array(affine[:3, :3], np.float64, order="C"), found)
    return found
