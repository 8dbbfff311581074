"""Tets drawn into a voxel grid: which tet holds each voxel centre, and what it says there.

Scan conversion: in each plane of the grid, and each row of voxels of it, a tet holds one run of centres,
which follows from its four coordinates by division.  Tets are closed (a centre on a face belongs to both
sides, down to a coordinate of -1e-9), and the first tet wins: no centre inside the mesh is missed, none
counts twice.  One plane is one task, so threads never meet and their number changes nothing.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import INSIDE, barycentric_rows, plain
from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

# Planes given out at a time by `values_by_slab`.
_SLAB = 16

# A coordinate that changes by less a voxel along k does not tell where a row begins or ends: over ten
# thousand voxels it changes by less than a tenth of what INSIDE leaves to rounding.
_LEVEL = 1e-14


class _Drawing(NamedTuple):
    """A mesh made ready to be drawn into a grid.

    Attributes
    ----------
    rows : (m, 4, 3) float64
        See `barycentric_rows`.
    low, high : (m, 3) int32
        First and last voxel of each tet's box, inside the grid.
    start : (I + 1,) int64
        Plane i meets ``members[start[i] : start[i + 1]]``, ascending.
    members : (k,) int32
        Tets.
    """

    rows: NDArray[np.float64]
    low: NDArray[np.int32]
    high: NDArray[np.int32]
    start: NDArray[np.int64]
    members: NDArray[np.int32]


def _ready(
    index_points: NDArray[np.float64], tets: NDArray[np.int64], shape: tuple[int, int, int]
) -> _Drawing:
    low = np.maximum(np.ceil(corner_range(index_points, tets, np.minimum) - 1e-6), 0).astype(np.int32)
    high = np.floor(corner_range(index_points, tets, np.maximum) + 1e-6)
    high = np.minimum(high, np.array(shape) - 1).astype(np.int32)
    return _Drawing(
        barycentric_rows(index_points, tets), low, high, *tets_by_plane(low, high, np.int64(shape[0]))
    )


def tets_on_grid(
    index_points: NDArray[np.float64], tets: NDArray[np.int64], shape: tuple[int, int, int]
) -> NDArray[np.int32]:
    """The tet that holds each voxel centre.

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
    owner = np.empty(shape, np.int32)
    drawing = _ready(plain(index_points, np.float64), plain(tets, np.int64), shape)
    on_threads(_draw, shape[0], *drawing, owner)
    return owner


def values_on_grid(
    index_points: NDArray[np.float64],
    tets: NDArray[np.int64],
    values: NDArray[np.float64],
    shape: tuple[int, int, int],
) -> NDArray[np.float32]:
    """Values of the mesh's points, carried linearly to the voxel centres.

    Nothing of the grid's size is made but the answer.

    Parameters
    ----------
    index_points : (n, 3) float64
        Mesh points as continuous voxel indices (`Grid.to_index`).
    tets : (m, 4) int64
    values : (n, 3) float64
    shape : tuple of 3 int

    Returns
    -------
    (I, J, K, 3) float32
        Computed in float64 and rounded once; NaN outside the mesh.  Read-only, so that a noun may keep it.
    """
    tets, values = plain(tets, np.int64), plain(values, np.float64)
    drawing = _ready(plain(index_points, np.float64), tets, shape)
    found = np.empty((*shape, 3), np.float32)
    on_threads(_paint, shape[0], *drawing, tets, values, np.int64(0), found)
    found.setflags(write=False)
    return found


def values_by_slab(
    index_points: NDArray[np.float64],
    tets: NDArray[np.int64],
    values: NDArray[np.float64],
    shape: tuple[int, int, int],
) -> Iterator[tuple[slice, NDArray[np.float64]]]:
    """As `values_on_grid`, but some planes at a time and not rounded.

    Yields
    ------
    slab : slice
        Along i.
    found : (slab, J, K, 3) float64
        NaN outside the mesh.
    """
    tets, values = plain(tets, np.int64), plain(values, np.float64)
    drawing = _ready(plain(index_points, np.float64), tets, shape)
    for first in range(0, shape[0], _SLAB):
        slab = slice(first, min(first + _SLAB, shape[0]))
        found = np.empty((slab.stop - first, *shape[1:], 3))
        on_threads(_paint, len(found), *drawing, tets, values, np.int64(first), found)
        yield slab, found


def corner_range(
    points: NDArray[np.float64], tets: NDArray[np.int64], extreme: np.ufunc
) -> NDArray[np.float64]:
    """(m, 3) smallest or largest corner of each tet, without an (m, 4, 3) array."""
    found = points[tets[:, 0]]
    for a in range(1, 4):
        extreme(found, points[tets[:, a]], out=found)
    return found


@kernel
def tets_by_plane(low, high, n_planes):  # type: ignore[no-untyped-def]
    """Counting sort of tets into the planes that they meet, ascending in each."""
    start = np.zeros(n_planes + 1, np.int64)
    members = np.empty(0, np.int32)
    for sweep in range(2):
        for t in range(low.shape[0]):
            if low[t, 1] > high[t, 1] or low[t, 2] > high[t, 2]:
                continue
            for i in range(low[t, 0], high[t, 0] + 1):
                if sweep == 1:
                    members[start[i]] = t
                start[i] += 1
        if sweep == 0:
            total = 0
            for i in range(n_planes + 1):
                total, start[i] = total + start[i], total
            members = np.empty(total, np.int32)
    for i in range(n_planes, 0, -1):
        start[i] = start[i - 1]
    start[0] = 0
    return start, members


@inner_kernel
def _enter(rows, t, i, line, edge):  # type: ignore[no-untyped-def]
    """Cut tet t with plane i.

    Fills ``line[r]``, value at (0, 0), slope along j and slope along k of coordinate r, and ``edge[r]``: it
    is INSIDE at ``k = edge[r, 0] + j * edge[r, 1]``.
    """
    x = i - rows[t, 3, 0]
    line[3, 0], line[3, 1], line[3, 2] = 1.0, 0.0, 0.0
    for r in range(3):
        line[r, 1], line[r, 2] = rows[t, r, 1], rows[t, r, 2]
        line[r, 0] = rows[t, r, 0] * x - rows[t, r, 1] * rows[t, 3, 1] - rows[t, r, 2] * rows[t, 3, 2]
        for d in range(3):
            line[3, d] -= line[r, d]
    for r in range(4):
        scale = 1.0 / line[r, 2] if abs(line[r, 2]) > _LEVEL else 1.0
        edge[r, 0], edge[r, 1] = (INSIDE - line[r, 0]) * scale, -line[r, 1] * scale


@inner_kernel
def _rows(line, edge, low, high):  # type: ignore[no-untyped-def]
    """First and last row of a plane between low and high that may hold anything of a tet cut by `_enter`.

    A row holds something where every bound from below on k lies under every bound from above (elimination
    after Fourier and Motzkin); a thousandth of a voxel is left to rounding.
    """
    first, last = float(low), float(high)
    for r in range(4):
        if line[r, 2] > _LEVEL:
            for s in range(4):
                if line[s, 2] < -_LEVEL:
                    slope, room = edge[r, 1] - edge[s, 1], edge[s, 0] - edge[r, 0]
                    if slope > _LEVEL:
                        last = min(last, room / slope + 1e-3)
                    elif slope < -_LEVEL:
                        first = max(first, room / slope - 1e-3)
    if first > last:  # they may be too large for a whole number
        return 1, 0
    return int(np.ceil(first)), int(np.floor(last))


@inner_kernel
def _run(line, edge, j, low, high):  # type: ignore[no-untyped-def]
    """First and last k of a row between low and high at which no coordinate is below INSIDE."""
    first, last = float(low), float(high)
    for r in range(4):
        k = edge[r, 0] + edge[r, 1] * j
        if line[r, 2] > _LEVEL:
            first = max(first, k)
        elif line[r, 2] < -_LEVEL:
            last = min(last, k)
        elif not k <= 0.0:  # nor in a tet without volume, of which all is NaN
            last = -1.0
    return int(np.ceil(first)), int(np.floor(last))


@kernel
def _draw(first_plane, last_plane, rows, low, high, start, members, owner):  # type: ignore[no-untyped-def]
    """Give each voxel centre to the first tet that holds it."""
    for i in range(first_plane, last_plane):
        line, edge = np.empty((4, 3)), np.empty((4, 2))
        for j in range(owner.shape[1]):
            for k in range(owner.shape[2]):
                owner[i, j, k] = -1
        for m in range(start[i], start[i + 1]):
            t = members[m]
            _enter(rows, t, i, line, edge)
            first_row, last_row = _rows(line, edge, low[t, 1], high[t, 1])
            for j in range(first_row, last_row + 1):
                first, last = _run(line, edge, j, low[t, 2], high[t, 2])
                for k in range(first, last + 1):
                    if owner[i, j, k] < 0:
                        owner[i, j, k] = t


@kernel
def _paint(  # type: ignore[no-untyped-def]
    first_plane, last_plane, rows, low, high, start, members, tets, values, begin, found
):
    """Write what the first tet that holds each voxel centre says there; plane 0 of `found` is `begin`."""
    for p in range(first_plane, last_plane):
        i = begin + p
        line, edge, tilt = np.empty((4, 3)), np.empty((4, 2)), np.empty((3, 3))
        for j in range(found.shape[1]):
            for k in range(found.shape[2]):
                for v in range(3):
                    found[p, j, k, v] = np.nan
        for m in range(start[i], start[i + 1]):
            t = members[m]
            _enter(rows, t, i, line, edge)
            for v in range(3):
                base = values[tets[t, 0], v]
                tilt[v, 0], tilt[v, 1], tilt[v, 2] = base, 0.0, 0.0
                for r in range(3):
                    rise = values[tets[t, r + 1], v] - base
                    for d in range(3):
                        tilt[v, d] += rise * line[r, d]
            first_row, last_row = _rows(line, edge, low[t, 1], high[t, 1])
            for j in range(first_row, last_row + 1):
                first, last = _run(line, edge, j, low[t, 2], high[t, 2])
                a, b = tilt[0, 0] + tilt[0, 1] * j, tilt[1, 0] + tilt[1, 1] * j
                c = tilt[2, 0] + tilt[2, 1] * j
                for k in range(first, last + 1):
                    if np.isnan(found[p, j, k, 0]):
                        found[p, j, k, 0] = a + tilt[0, 2] * k
                        found[p, j, k, 1] = b + tilt[1, 2] * k
                        found[p, j, k, 2] = c + tilt[2, 2] * k
