"""Where a level set of point values (a plane, in most cases) cuts tets and triangles.

Every new point is ``(1 - weight) * first + weight * second`` of two points of the mesh, so that the same
cut can be drawn wherever the mesh has been moved to: the cut of a body and the image of that cut are one
answer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Cut:
    """Points between pairs of mesh points, and the cells they form.

    Parameters
    ----------
    first, second : (k,) int64
        Points of the mesh each new point lies between; equal for a point of the mesh itself.
    weight : (k,) float64
        Share of `second`.
    cells : (c, 2 or 3) int64
        Segments or triangles, into the new points.
    parent : (c,) int64
        Tet or triangle each cell was cut from.
    """

    first: Ints
    second: Ints
    weight: Floats
    cells: Ints
    parent: Ints

    def at(self, points: Floats) -> Floats:
        """(k, 3) the new points, for the mesh points given."""
        w = self.weight[:, None]
        return np.asarray((1.0 - w) * points[self.first] + w * points[self.second])


def _crossings(values: Floats, a: Ints, b: Ints) -> tuple[Ints, Ints, Floats, Ints]:
    """Unique crossing points of the edges (a, b), and which of them each edge has."""
    low, high = np.minimum(a, b).ravel(), np.maximum(a, b).ravel()
    n = np.int64(len(values))
    keys, inverse = np.unique(low * n + high, return_inverse=True)
    first, second = keys // n, keys % n
    start, end = values[first], values[second]
    span = np.where(start == end, 1.0, start - end)
    return first, second, np.where(start == end, 0.0, start / span), inverse.reshape(a.shape)


def cut_tets(values: Floats, tets: Ints) -> Cut:
    """Triangles in which the zero level of `values` crosses tets.

    Parameters
    ----------
    values : (n,) float64
        Zero counts as positive, so a plane through mesh points is no special case.
    tets : (m, 4) int64
    """
    above = values[tets] >= 0.0
    count = above.sum(axis=1)
    order = np.argsort(~above, axis=1, kind="stable")  # the corners above come first
    sorted_tets = np.take_along_axis(tets, order, axis=1)
    one, two, three = (np.flatnonzero(count == k) for k in (1, 2, 3))
    p, q, r = sorted_tets[one], sorted_tets[two], sorted_tets[three]
    a = np.concatenate([p[:, [0, 0, 0]], r[:, [3, 3, 3]], q[:, [0, 0, 1]], q[:, [0, 1, 1]]])
    b = np.concatenate([p[:, [1, 2, 3]], r[:, [0, 1, 2]], q[:, [2, 3, 3]], q[:, [2, 3, 2]]])
    first, second, weight, cells = _crossings(values, a, b)
    return Cut(first, second, weight, cells, np.concatenate([one, three, two, two]))


def cut_triangles(values: Floats, triangles: Ints) -> Cut:
    """Segments in which the zero level of `values` crosses triangles."""
    above = values[triangles] >= 0.0
    count = above.sum(axis=1)
    crossed = np.flatnonzero((count == 1) | (count == 2))
    lonely = above[crossed] == (count[crossed] == 1)[:, None]
    at = np.argmax(lonely, axis=1)
    corners = triangles[crossed]
    rows = np.arange(len(crossed))
    apex = corners[rows, at]
    a = np.stack([apex, apex], axis=1)
    b = np.stack([corners[rows, (at + 1) % 3], corners[rows, (at + 2) % 3]], axis=1)
    first, second, weight, cells = _crossings(values, a, b)
    return Cut(first, second, weight, cells, crossed)


def clip_triangles(values: Floats, triangles: Ints) -> Cut:
    """The part of the triangles where `values` is below zero, turned as before."""
    below = values[triangles] < 0.0
    count = below.sum(axis=1)
    shift = np.where(count == 1, np.argmax(below, axis=1), np.argmin(below, axis=1))
    turned = np.take_along_axis(triangles, (shift[:, None] + np.arange(3)) % 3, axis=1)
    whole, one, two = (np.flatnonzero(count == k) for k in (3, 1, 2))
    w, p, q = triangles[whole], turned[one], turned[two]
    # Corner 0 of q is above: what stays is the quadrangle (0-1), 1, 2, (0-2), as two triangles.
    a = np.concatenate([w, p[:, [0, 0, 0]], q[:, [0, 1, 2]], q[:, [0, 2, 0]]])
    b = np.concatenate([w, p[:, [0, 1, 2]], q[:, [1, 1, 2]], q[:, [1, 2, 2]]])
    first, second, weight, cells = _crossings(values, a, b)
    return Cut(first, second, weight, cells, np.concatenate([whole, one, two, two]))


def chains(cells: Ints) -> list[Ints]:
    """Segments joined end to end: lists of points, a closed one ending where it began.

    Parameters
    ----------
    cells : (c, 2) int64

    Returns
    -------
    list of (k,) int64
        Every segment is in exactly one chain.
    """
    at: dict[int, list[int]] = {}
    for s, (a, b) in enumerate(cells.tolist()):
        at.setdefault(a, []).append(s)
        at.setdefault(b, []).append(s)
    used = np.zeros(len(cells), bool)
    ends = [p for p in sorted(at) if len(at[p]) != 2]
    found = []
    for start in ends + sorted(at):
        while any(not used[s] for s in at[start]):
            found.append(_walk(start, cells, at, used))
    return found


def _walk(start: int, cells: Ints, at: dict[int, list[int]], used: NDArray[np.bool_]) -> Ints:
    path = [start]
    while True:
        onward = [s for s in at[path[-1]] if not used[s]]
        if not onward or (len(path) > 1 and len(at[path[-1]]) != 2):
            return np.array(path, np.int64)
        used[onward[0]] = True
        a, b = cells[onward[0]]
        path.append(int(b if a == path[-1] else a))
