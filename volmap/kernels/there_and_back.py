"""Through one sampled field and back through another, by trilinear interpolation."""

from __future__ import annotations

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def _displaced(displacement, inverse, x, y, base, part):  # type: ignore[no-untyped-def]
    """Put ``x + u(x)`` into `y`; NaN where one of the voxels that count is undefined or missing."""
    for d in range(3):
        index = inverse[d, 3]
        for e in range(3):
            index += inverse[d, e] * x[e]
        if not (0.0 <= index <= displacement.shape[d] - 1):
            y[:] = np.nan
            return
        base[d] = min(int(index), max(displacement.shape[d] - 2, 0))
        part[d] = index - base[d]
    for d in range(3):
        y[d] = x[d]
    for corner in range(8):
        weight = 1.0
        i, j, k = base[0], base[1], base[2]
        for d in range(3):
            high = (corner >> d) & 1
            weight *= part[d] if high == 1 else 1.0 - part[d]
        i, j, k = i + (corner & 1), j + ((corner >> 1) & 1), k + (corner >> 2)
        if weight != 0.0:
            for d in range(3):
                y[d] += weight * displacement[i, j, k, d]


@njit(cache=True, parallel=True)
def _errors(first, affine, second, inverse, found):  # type: ignore[no-untyped-def]
    """Fill `found` with the distance from each voxel centre of `first` to where it comes back."""
    for i in prange(first.shape[0]):
        x, y, z, base, part = np.empty(3), np.empty(3), np.empty(3), np.empty(3, np.int64), np.empty(3)
        for j in range(first.shape[1]):
            for k in range(first.shape[2]):
                if np.isnan(first[i, j, k, 0]):
                    found[i, j, k] = np.nan
                    continue
                for d in range(3):
                    x[d] = affine[d, 0] * i + affine[d, 1] * j + affine[d, 2] * k + affine[d, 3]
                    y[d] = x[d] + first[i, j, k, d]
                _displaced(second, inverse, y, z, base, part)
                total = 0.0
                for d in range(3):
                    total += (z[d] - x[d]) ** 2
                found[i, j, k] = np.sqrt(total)


def round_trip_errors(
    first: NDArray[np.float32],
    first_affine: NDArray[np.float64],
    second: NDArray[np.float32],
    second_affine: NDArray[np.float64],
) -> NDArray[np.float32]:
    """How far voxel centres come back from where they started, through `first` and then `second`.

    Parameters
    ----------
    first, second : (I, J, K, 3) float32, mm, world components
        Each on its own grid; NaN where undefined.
    first_affine, second_affine : (4, 4) float64
        Voxel indices to world mm.

    Returns
    -------
    (I, J, K) float32, mm
        On the grid of `first`; NaN where it is undefined, or where a voxel of `second` with any weight is.
    """
    first, second = np.require(first, np.float32, ["C", "W"]), np.require(second, np.float32, ["C", "W"])
    found = np.empty(first.shape[:3], np.float32)
    affine = np.array(first_affine, np.float64, order="C")
    inverse = np.array(np.linalg.inv(second_affine), np.float64, order="C")
    _errors(first, affine, second, inverse, found)
    return found
