"""Which tet holds a point, by a regular grid of buckets."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import INSIDE, barycentric_rows, plain
from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Buckets are half as wide as the mean tet: about a dozen tets meet one, about ten buckets meet a tet.
_WIDTH_IN_TETS = 0.5
_BUCKETS_PER_TET = 16
_BLOCK = 16384  # places whose corners and values stay in the cache


class Buckets(NamedTuple):
    """A regular grid of boxes, each with the tets that may meet it.

    Attributes
    ----------
    origin : (3,) float64, mm
    width_mm : float
        Edge of a box.
    counts : (3,) int64
        Boxes along x, y, z.
    start : (boxes + 1,) int64
        Box b holds ``members[start[b] : start[b + 1]]``, ascending.
    members : (k,) int64
        Tets.
    """

    origin: Floats
    width_mm: float
    counts: Ints
    start: Ints
    members: Ints


def build_buckets(points: Floats, tets: Ints) -> Buckets:
    """Sort the tets of a mesh into boxes.

    Parameters
    ----------
    points : (n, 3) float64, mm
    tets : (m, 4) int64

    Returns
    -------
    Buckets
        Good for as long as the points stay where they are.
    """
    points, tets = plain(points, np.float64), plain(tets, np.int64)
    corners = points[tets]
    lowest, highest = corners.min(axis=1), corners.max(axis=1)
    low, high = lowest.min(axis=0), highest.max(axis=0)
    margin = 1e-6 * float((high - low).max())
    low, size = low - margin, high - low + 2 * margin
    width = _WIDTH_IN_TETS * float((highest - lowest).mean())
    width = max(width, (float(size.prod()) / (_BUCKETS_PER_TET * len(tets) + 64)) ** (1 / 3))
    counts = np.asarray(np.floor(size / width) + 1, np.int64)
    rows = barycentric_rows(points, tets)
    start, members = _sort_into_boxes(points, tets, rows, low, width, counts)
    return Buckets(low, width, counts, start, members)


def locate(buckets: Buckets, points: Floats, tets: Ints, queries: Floats) -> tuple[Ints, Floats]:
    """The tet that holds each query, and where in it.

    A point on a shared face, edge or corner belongs to the tet in which its smallest coordinate is
    largest, and of equal ones to the first.  The same input gives the same answer whatever the number
    of threads.

    Parameters
    ----------
    buckets : Buckets
        From `build_buckets` of these points and tets.
    points : (n, 3) float64, mm
    tets : (m, 4) int64
    queries : (q, 3) float64, mm

    Returns
    -------
    tet : (q,) int64
        -1 outside the mesh (a coordinate below -1e-9 in every tet).
    barycentric : (q, 4) float64
        Sum 1 a row; NaN outside.
    """
    rows = barycentric_rows(plain(points, np.float64), plain(tets, np.int64))
    queries = plain(queries, np.float64).reshape(-1, 3)
    n = len(queries)
    tet, barycentric = np.empty(n, np.int64), np.empty((n, 4))
    order = _box_after_box(buckets, queries)
    on_threads(_search, n, rows, *buckets, queries.take(order, axis=0), order, tet, barycentric)
    return tet, barycentric


def _box_after_box(buckets: Buckets, queries: Floats) -> Ints:
    """An order in which queries of one box follow each other: the tets of a box are then in the cache.

    A million places strewn over 100k tets take a third of the time they take as they come.
    """
    if len(queries) < _BLOCK:
        return np.arange(len(queries))
    with np.errstate(invalid="ignore", over="ignore"):
        cell = np.clip((queries - buckets.origin) / buckets.width_mm, 0, buckets.counts - 1).astype(np.int64)
        return np.argsort((cell[:, 0] * buckets.counts[1] + cell[:, 1]) * buckets.counts[2] + cell[:, 2])


def interpolate(tets: Ints, values: Floats, tet: Ints, barycentric: Floats) -> Floats:
    """Values of the mesh's points, carried linearly to located places.

    Parameters
    ----------
    tets : (m, 4) int64
    values : (n, ...) float64
        One a mesh point.
    tet : (q,) int64
    barycentric : (q, 4) float64

    Returns
    -------
    (q, ...) float64
        NaN where `tet` is -1.
    """
    values = np.asarray(values, np.float64)
    found = np.empty((len(tet), *values.shape[1:]))
    on_threads(_blend, len(tet), tets, values, np.asarray(tet), barycentric, found, fewest=_BLOCK)
    return found


def _blend(
    first: int, last: int, tets: Ints, values: Floats, tet: Ints, barycentric: Floats, found: Floats
) -> None:
    """Weighted sums of corner values, a block at a time."""
    for start in range(first, last, _BLOCK):
        part = slice(start, min(start + _BLOCK, last))
        corners = values.take(tets.take(np.maximum(tet[part], 0), axis=0), axis=0)
        np.einsum("qa,qa...->q...", barycentric[part], corners, out=found[part])
        found[part][tet[part] < 0] = np.nan


@inner_kernel
def _box_range(points, tets, t, origin, width, counts, first, last):  # type: ignore[no-untyped-def]
    """First and last box, along each axis, that the tet's own box meets."""
    for d in range(3):
        low = high = points[tets[t, 0], d]
        for a in range(1, 4):
            low, high = min(low, points[tets[t, a], d]), max(high, points[tets[t, a], d])
        slack = 1e-7 * width
        first[d] = min(max(int(np.floor((low - slack - origin[d]) / width)), 0), counts[d] - 1)
        last[d] = min(max(int(np.floor((high + slack - origin[d]) / width)), 0), counts[d] - 1)


@inner_kernel
def _misses(rows, t, x, y, z, half):  # type: ignore[no-untyped-def]
    """True when the box of that centre lies wholly beyond one face of the tet."""
    rest, gx, gy, gz = 1.0, 0.0, 0.0, 0.0
    for r in range(3):
        a, b, c = rows[t, r, 0], rows[t, r, 1], rows[t, r, 2]
        value = a * (x - rows[t, 3, 0]) + b * (y - rows[t, 3, 1]) + c * (z - rows[t, 3, 2])
        if value + half * (abs(a) + abs(b) + abs(c)) < INSIDE:
            return True
        rest, gx, gy, gz = rest - value, gx + a, gy + b, gz + c
    return rest + half * (abs(gx) + abs(gy) + abs(gz)) < INSIDE


@kernel
def _sort_into_boxes(points, tets, rows, origin, width, counts):  # type: ignore[no-untyped-def]
    """Counting sort of tets into the boxes they may meet, ascending in each box."""
    start = np.zeros(counts[0] * counts[1] * counts[2] + 1, np.int64)
    members = np.empty(0, np.int64)
    first, last = np.empty(3, np.int64), np.empty(3, np.int64)
    half = 0.5 * width * (1 + 1e-6)
    for sweep in range(2):
        for t in range(tets.shape[0]):
            _box_range(points, tets, t, origin, width, counts, first, last)
            for i in range(first[0], last[0] + 1):
                x = origin[0] + (i + 0.5) * width
                for j in range(first[1], last[1] + 1):
                    y = origin[1] + (j + 0.5) * width
                    for k in range(first[2], last[2] + 1):
                        z = origin[2] + (k + 0.5) * width
                        if _misses(rows, t, x, y, z, half):
                            continue
                        box = (i * counts[1] + j) * counts[2] + k
                        if sweep == 1:
                            members[start[box]] = t
                        start[box] += 1
        if sweep == 0:  # counts become ends, then places to write at
            total = 0
            for box in range(start.size):
                total, start[box] = total + start[box], total
            members = np.empty(total, np.int64)
    for box in range(start.size - 1, 0, -1):
        start[box] = start[box - 1]
    start[0] = 0
    return start, members


@kernel
def _search(  # type: ignore[no-untyped-def]
    first, last, rows, origin, width, counts, start, members, queries, order, tet, barycentric
):
    """Try every tet of the query's box; keep the one it is deepest in.  Answer i belongs at order[i]."""
    for i_query in range(first, last):
        x, y, z = queries[i_query, 0], queries[i_query, 1], queries[i_query, 2]
        q = order[i_query]
        best, deepest = -1, -np.inf
        i, j, k = (x - origin[0]) / width, (y - origin[1]) / width, (z - origin[2]) / width
        if 0 <= i < counts[0] and 0 <= j < counts[1] and 0 <= k < counts[2]:
            box = (int(i) * counts[1] + int(j)) * counts[2] + int(k)
            for m in range(start[box], start[box + 1]):
                depth = _smallest(rows, members[m], x, y, z)
                if depth >= INSIDE and depth > deepest:
                    best, deepest = members[m], depth
        tet[q] = best
        for a in range(4):
            barycentric[q, a] = np.nan
        if best >= 0:
            rest = 1.0
            for r in range(3):
                value = _coordinate(rows, best, r, x, y, z)
                barycentric[q, r + 1] = value
                rest -= value
            barycentric[q, 0] = rest


@inner_kernel
def _coordinate(rows, t, r, x, y, z):  # type: ignore[no-untyped-def]
    """Barycentric coordinate ``1 + r`` of a place in tet t."""
    return (
        rows[t, r, 0] * (x - rows[t, 3, 0])
        + rows[t, r, 1] * (y - rows[t, 3, 1])
        + rows[t, r, 2] * (z - rows[t, 3, 2])
    )


@inner_kernel
def _smallest(rows, t, x, y, z):  # type: ignore[no-untyped-def]
    """Smallest of the four coordinates of a place in tet t; NaN in a tet without volume."""
    a = _coordinate(rows, t, 0, x, y, z)
    b = _coordinate(rows, t, 1, x, y, z)
    c = _coordinate(rows, t, 2, x, y, z)
    rest = 1.0 - a - b - c
    low = a if a < b else b
    low = c if c < low else low
    return rest if rest < low else low
