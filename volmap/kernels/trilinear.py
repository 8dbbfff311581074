"""Trilinear interpolation in a voxel grid with holes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

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
    found = np.empty((len(index), values.shape[3]))
    on_threads(_sample, len(index), _locked(values), plain(index, np.float64), found)
    return found


def homecoming(
    there: NDArray[np.float32],
    back: NDArray[np.float32],
    to_world: NDArray[np.float64],
    to_index: NDArray[np.float64],
) -> NDArray[np.float32]:
    """How far from home each voxel centre ends when one field sends it out and the other back.

    Parameters
    ----------
    there : (I, J, K, 3) float32, mm
    back : (A, B, C, 3) float32, mm
    to_world : (4, 4) float64
        Voxel indices of `there` to world mm.
    to_index : (4, 4) float64
        World mm to voxel indices of `back`.

    Returns
    -------
    (I, J, K) float32, mm
        NaN where either way is not defined.
    """
    distance = np.empty(there.shape[:3], np.float32)
    matrices = plain(to_world, np.float64), plain(to_index, np.float64)
    on_threads(_go_and_return, len(distance), _locked(there), _locked(back), *matrices, distance)
    return distance


def _locked(values: NDArray[np.float32]) -> NDArray[np.float32]:
    """A read-only view: one kind of array for the kernels, without a copy of a big field."""
    view = np.ascontiguousarray(values, np.float32).view()
    view.setflags(write=False)
    return view


@inner_kernel
def _axis(x, n):  # type: ignore[no-untyped-def]
    """The voxel at or below x and the share of the next one; -1 when x is beyond the outer centres."""
    if not -_AT_CENTRE <= x <= n - 1 + _AT_CENTRE:
        return -1, 0.0
    low = int(np.floor(x + _AT_CENTRE))
    share = x - low
    return low, share if share > _AT_CENTRE else 0.0


@inner_kernel
def _between(values, i, j, k, a, b, c, v):  # type: ignore[no-untyped-def]
    """Component v in the cell of voxel (i, j, k), at shares (a, b, c) of the next voxels."""
    total = 0.0
    for di in range(2 if a > 0.0 else 1):
        p = a if di else 1.0 - a
        for dj in range(2 if b > 0.0 else 1):
            q = p * (b if dj else 1.0 - b)
            for dk in range(2 if c > 0.0 else 1):
                total += q * (c if dk else 1.0 - c) * values[i + di, j + dj, k + dk, v]
    return total


@inner_kernel
def _inside(values, i, j, k, a, b, c, found):  # type: ignore[no-untyped-def]
    """The first three components where all eight voxels have a share: `_between` without its questions."""
    for v in range(3):
        low = (1.0 - c) * values[i, j, k, v] + c * values[i, j, k + 1, v]
        high = (1.0 - c) * values[i, j + 1, k, v] + c * values[i, j + 1, k + 1, v]
        found[v] = (1.0 - a) * ((1.0 - b) * low + b * high)
        low = (1.0 - c) * values[i + 1, j, k, v] + c * values[i + 1, j, k + 1, v]
        high = (1.0 - c) * values[i + 1, j + 1, k, v] + c * values[i + 1, j + 1, k + 1, v]
        found[v] += a * ((1.0 - b) * low + b * high)


@kernel
def _sample(first, last, values, index, found):  # type: ignore[no-untyped-def]
    """One place after the other."""
    for n in range(first, last):
        i, a = _axis(index[n, 0], values.shape[0])
        j, b = _axis(index[n, 1], values.shape[1])
        k, c = _axis(index[n, 2], values.shape[2])
        for v in range(values.shape[3]):
            if i < 0 or j < 0 or k < 0:
                found[n, v] = np.nan
            else:
                found[n, v] = _between(values, i, j, k, a, b, c, v)


@kernel
def _go_and_return(first, last, there, back, to_world, to_index, distance):  # type: ignore[no-untyped-def]
    """x + u(x) = y, then the length of u(x) + v(y)."""
    y, v = np.empty(3), np.empty(3)
    for p in range(first, last):
        for q in range(there.shape[1]):
            for r in range(there.shape[2]):
                distance[p, q, r] = np.nan
                if np.isnan(there[p, q, r, 0]):
                    continue
                for d in range(3):
                    y[d] = to_world[d, 0] * p + to_world[d, 1] * q + to_world[d, 2] * r + to_world[d, 3]
                    y[d] += there[p, q, r, d]
                i, a = _axis(_row(to_index, np.int64(0), y), back.shape[0])
                j, b = _axis(_row(to_index, np.int64(1), y), back.shape[1])
                k, c = _axis(_row(to_index, np.int64(2), y), back.shape[2])
                if i < 0 or j < 0 or k < 0:
                    continue
                square = 0.0
                if a > 0.0 and b > 0.0 and c > 0.0:
                    _inside(back, i, j, k, a, b, c, v)
                    for d in range(3):
                        square += (there[p, q, r, d] + v[d]) ** 2
                else:
                    for d in range(3):
                        square += (there[p, q, r, d] + _between(back, i, j, k, a, b, c, d)) ** 2
                distance[p, q, r] = np.sqrt(square)


@inner_kernel
def _row(matrix, d, y):  # type: ignore[no-untyped-def]
    """Component d of an affine map."""
    return matrix[d, 0] * y[0] + matrix[d, 1] * y[1] + matrix[d, 2] * y[2] + matrix[d, 3]
