"""Trilinear interpolation in a voxel grid with holes."""

from __future__ import annotations

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain

# A place this close to a voxel centre along an axis, in voxels, is at the centre: only rounding is nearer.
_AT_CENTRE = 1e-9


def sample(values: NDArray[np.float32], index: NDArray[np.float64]) -> NDArray[np.float64]:
    """Values between voxel centres.

    Every one of the (up to eight) voxels with a share in the answer must exist and hold numbers; a place
    at a voxel centre asks that voxel only.

    Parameters
    ----------
    values : (I, J, K, c) float32
        NaN where not defined.
    index : (n, 3) float64
        Continuous voxel indices.

    Returns
    -------
    (n, c) float64
        NaN where a voxel is missing.
    """
    locked = np.ascontiguousarray(values, np.float32).view()
    locked.setflags(write=False)  # one kind of array for the kernel, without a copy of a big field
    found = np.empty((len(index), values.shape[3]))
    _sample(locked, plain(index, np.float64), found)
    return found


@njit(cache=True, parallel=True)
def _sample(values, index, found):  # type: ignore[no-untyped-def]
    """Sum of the corners of the cell, each with the product of its three shares."""
    for n in prange(index.shape[0]):
        found[n] = np.nan
        low, share = np.empty(3, np.int64), np.empty(3)
        inside = True
        for d in range(3):
            if not -_AT_CENTRE <= index[n, d] <= values.shape[d] - 1 + _AT_CENTRE:
                inside = False
                break
            low[d] = int(np.floor(index[n, d] + _AT_CENTRE))
            share[d] = index[n, d] - low[d]
            if share[d] <= _AT_CENTRE:
                share[d] = 0.0
        if not inside:
            continue
        found[n] = 0.0
        for corner in range(8):
            a, b, c = corner >> 2, (corner >> 1) & 1, corner & 1
            weight = share[0] if a else 1.0 - share[0]
            weight *= share[1] if b else 1.0 - share[1]
            weight *= share[2] if c else 1.0 - share[2]
            if weight > 0.0:
                for v in range(values.shape[3]):
                    found[n, v] += weight * values[low[0] + a, low[1] + b, low[2] + c, v]
