"""Tets drawn into a voxel grid: which tet holds each voxel centre, and what it says there."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from volmap.kernels.barycentric import INSIDE, barycentric_rows, plain

# Slices of the grid that are drawn by one thread, or given out, at a time.
_SLAB = 8


def tets_on_grid(
    index_points: NDArray[np.float64], tets: NDArray[np.int64], shape: tuple[int, int, int]
) -> NDArray[np.int32]:
    """The tet that holds each voxel centre.

    Tets are closed (a centre on a face belongs to both sides, down to a coordinate of -1e-9), and the
    first tet wins: no centre inside the mesh is missed, none counts twice, and the number of threads
    changes nothing.

    Parameters
    ----------
    index_points : (n, 3) float64
        Mesh points as continuous voxel indices (`Grid.to_index`).
    tets : (m, 4) int64
    shape : tuple of 3 int

    Returns
    -------
    (I, J, K) int32
        -1 outside the mesh.
    """
    index_points, tets = plain(index_points, np.float64), plain(tets, np.int64)
    low = np.maximum(np.ceil(_corner_range(index_points, tets, np.minimum) - 1e-6), 0).astype(np.int64)
    high = np.floor(_corner_range(index_points, tets, np.maximum) + 1e-6)
    high = np.minimum(high, np.array(shape) - 1).astype(np.int64)
    start, members = _slabs(low, high, -(-shape[0] // _SLAB))
    owner = np.full(shape, -1, np.int32)
    _draw(barycentric_rows(index_points, tets), low, high, start, members, owner)
    return owner


def values_by_slab(
    index_points: NDArray[np.float64],
    tets: NDArray[np.int64],
    values: NDArray[np.float64],
    owner: NDArray[np.int32],
) -> Iterator[tuple[slice, NDArray[np.float64]]]:
    """Values of the mesh's points, carried linearly to the voxel centres, some slices at a time.

    Parameters
    ----------
    index_points : (n, 3) float64
    tets : (m, 4) int64
    values : (n, c) float64
    owner : (I, J, K) int32
        From `tets_on_grid`.

    Yields
    ------
    slab : slice
        Along i.
    found : (slab, J, K, c) float64
        NaN outside the mesh.
    """
    tets, values = plain(tets, np.int64), plain(values, np.float64)
    rows = barycentric_rows(plain(index_points, np.float64), tets)
    for first in range(0, owner.shape[0], _SLAB):
        slab = slice(first, min(first + _SLAB, owner.shape[0]))
        found = np.empty((slab.stop - first, *owner.shape[1:], values.shape[1]))
        _evaluate(rows, tets, values, plain(owner[slab], np.int32), first, found)
        yield slab, found


def values_on_grid(
    index_points: NDArray[np.float64],
    tets: NDArray[np.int64],
    values: NDArray[np.float64],
    owner: NDArray[np.int32],
) -> NDArray[np.float32]:
    """All slabs of `values_by_slab` in one array, computed in float64 and rounded once.

    Returns
    -------
    (I, J, K, c) float32
        NaN outside the mesh.
    """
    whole = np.empty((*owner.shape, np.shape(values)[1]), np.float32)
    for slab, found in values_by_slab(index_points, tets, values, owner):
        whole[slab] = found
    return whole


def _corner_range(
    points: NDArray[np.float64], tets: NDArray[np.int64], extreme: np.ufunc
) -> NDArray[np.float64]:
    """(m, 3) smallest or largest corner of each tet, without an (m, 4, 3) array."""
    found = points[tets[:, 0]]
    for a in range(1, 4):
        extreme(found, points[tets[:, a]], out=found)
    return found


@njit(cache=True)
def _slabs(low, high, n_slabs):  # type: ignore[no-untyped-def]
    """Counting sort of tets into the slabs of the grid that they meet, ascending in each."""
    start = np.zeros(n_slabs + 1, np.int64)
    members = np.empty(0, np.int64)
    for sweep in range(2):
        for t in range(low.shape[0]):
            if low[t, 1] > high[t, 1] or low[t, 2] > high[t, 2] or low[t, 0] > high[t, 0]:
                continue
            for s in range(low[t, 0] // _SLAB, high[t, 0] // _SLAB + 1):
                if sweep == 1:
                    members[start[s]] = t
                start[s] += 1
        if sweep == 0:
            total = 0
            for s in range(n_slabs + 1):
                total, start[s] = total + start[s], total
            members = np.empty(total, np.int64)
    for s in range(n_slabs, 0, -1):
        start[s] = start[s - 1]
    start[0] = 0
    return start, members


@njit(cache=True, parallel=True)
def _draw(rows, low, high, start, members, owner):  # type: ignore[no-untyped-def]
    """Give each voxel centre to the first tet that holds it; one slab a task, so no two threads meet."""
    for s in prange(start.size - 1):
        for m in range(start[s], start[s + 1]):
            t = members[m]
            for i in range(max(low[t, 0], s * _SLAB), min(high[t, 0], s * _SLAB + _SLAB - 1) + 1):
                for j in range(low[t, 1], high[t, 1] + 1):
                    _draw_row(rows, t, i, j, low[t, 2], high[t, 2], owner)


@njit(cache=True)
def _draw_row(rows, t, i, j, first, last, owner):  # type: ignore[no-untyped-def]
    """One row of voxels of one tet: along k each coordinate is ``base + k * slope``."""
    x, y = i - rows[t, 3, 0], j - rows[t, 3, 1]
    a = rows[t, 0, 0] * x + rows[t, 0, 1] * y
    b = rows[t, 1, 0] * x + rows[t, 1, 1] * y
    c = rows[t, 2, 0] * x + rows[t, 2, 1] * y
    for k in range(first, last + 1):
        z = k - rows[t, 3, 2]
        p, q, r = a + rows[t, 0, 2] * z, b + rows[t, 1, 2] * z, c + rows[t, 2, 2] * z
        if p >= INSIDE and q >= INSIDE and r >= INSIDE and 1.0 - p - q - r >= INSIDE and owner[i, j, k] < 0:
            owner[i, j, k] = t


@njit(cache=True, parallel=True)
def _evaluate(rows, tets, values, owner, first, found):  # type: ignore[no-untyped-def]
    """Linear interpolation in each voxel's own tet."""
    for i in prange(owner.shape[0]):
        weight = np.empty(4)
        for j in range(owner.shape[1]):
            for k in range(owner.shape[2]):
                t = owner[i, j, k]
                if t < 0:
                    found[i, j, k] = np.nan
                    continue
                x, y, z = first + i - rows[t, 3, 0], j - rows[t, 3, 1], k - rows[t, 3, 2]
                weight[0] = 1.0
                for r in range(3):
                    weight[r + 1] = rows[t, r, 0] * x + rows[t, r, 1] * y + rows[t, r, 2] * z
                    weight[0] -= weight[r + 1]
                for v in range(values.shape[1]):
                    total = 0.0
                    for a in range(4):
                        total += weight[a] * values[tets[t, a], v]
                    found[i, j, k, v] = total
