"""The body-centred-cubic lattice of tets, and its conforming bisection.

Sommerville's tet (Sommerville 1923; Fuchs 1998): four of them around every face between two cubes; dihedral
angles 60 and 90 degrees, edges a and a sqrt(3)/2.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.tets import signed_volumes

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Tets that bisection by 0..6 edges of one tet can give, and what one tet needs while it is being cut.
MOST_PIECES = np.array([1, 2, 4, 8, 16, 32, 64])


def oriented(points: Floats, tets: Ints) -> Ints:
    """The same tets with every volume positive."""
    turned = tets.copy()
    flip = signed_volumes(points, tets) < 0
    turned[flip, 2], turned[flip, 3] = tets[flip, 3], tets[flip, 2]
    return turned


def _axis_tets(corner: Ints, centre: Ints, near: NDArray[np.bool_] | None, axis: int) -> Ints:
    """The four tets around each face between two cubes that follow each other along an axis; positive."""
    order = (axis, (axis + 1) % 3, (axis + 2) % 3)
    centre, corner = np.transpose(centre, order), np.transpose(corner, order)[1:-1]
    before, after = centre[:-1].ravel(), centre[1:].ravel()
    ring = [corner[:, :-1, :-1], corner[:, 1:, :-1], corner[:, 1:, 1:], corner[:, :-1, 1:]]
    quads = [c.ravel() for c in ring]
    tets = []
    for i in range(4):
        corners = (before, after, quads[i], quads[(i + 1) % 4])
        kept = slice(None) if near is None else near[before] | near[after] | near[quads[i]] | near[corners[3]]
        tets.append(np.stack([c[kept] for c in corners], axis=1))
    return np.concatenate(tets)


def bcc(
    low: Floats,
    high: Floats,
    cell_mm: float,
    near: Callable[[Floats], NDArray[np.bool_]] | None = None,
) -> tuple[Floats, Ints]:
    """Lattice tets that cover a box.

    Parameters
    ----------
    low, high : (3,) float64, mm
        The first cube corner is at `low`; the tets reach at least half a cell beyond `high`.
    cell_mm : float
    near : callable, optional
        Given (n, 3) points, tells which of them matter; tets without such a point are left out.

    Returns
    -------
    points : (n, 3) float64, mm
        All of the box.
    tets : (m, 4) int64
        Positive.
    """
    n = np.ceil((high - low) / cell_mm).astype(np.int64) + 1
    corners = np.stack(np.meshgrid(*[np.arange(k + 1) for k in n], indexing="ij"), axis=-1).reshape(-1, 3)
    centres = np.stack(np.meshgrid(*[np.arange(k) for k in n], indexing="ij"), axis=-1).reshape(-1, 3) + 0.5
    corner = np.arange(len(corners)).reshape(n + 1)
    centre = len(corners) + np.arange(len(centres)).reshape(n)
    points = low + cell_mm * np.concatenate([corners, centres])
    kept = None if near is None else near(points)
    return points, np.concatenate([_axis_tets(corner, centre, kept, axis) for axis in range(3)])


def used_only(points: Floats, tets: Ints) -> tuple[Floats, Ints, Ints]:
    """Points without those that no tet uses.

    Returns
    -------
    points, tets : arrays
    kept : (k,) int64
        Old numbers of the points.
    """
    used = np.zeros(len(points), np.bool_)
    used[tets] = True
    kept, new = np.flatnonzero(used), np.cumsum(used) - 1
    return points[kept], new[tets], kept


@inner_kernel
def _cut_one(stack, n_pieces, start, end, middle):  # type: ignore[no-untyped-def]
    """Bisect those pieces on the stack that hold the edge (start, end); returns the number of pieces."""
    for s in range(n_pieces):
        at_start, at_end = -1, -1
        for d in range(4):
            if stack[s, d] == start:
                at_start = d
            elif stack[s, d] == end:
                at_end = d
        if at_start >= 0 and at_end >= 0:
            for d in range(4):
                stack[n_pieces, d] = stack[s, d]
            stack[n_pieces, at_start] = middle
            stack[s, at_end] = middle
            n_pieces += 1
    return n_pieces


@kernel
def _split(tets, edge_of_tet, ends, middle, cuts, n_cuts, pieces, parent, stack):  # type: ignore[no-untyped-def]
    """Fill `pieces` and `parent`; `cuts[t, :n_cuts[t]]` are the edges of tet t to cut, in their order."""
    n = 0
    for t in range(tets.shape[0]):
        for d in range(4):
            stack[0, d] = tets[t, d]
        count = np.int64(1)
        for q in range(n_cuts[t]):
            e = edge_of_tet[t, cuts[t, q]]
            count = _cut_one(stack, count, ends[e, 0], ends[e, 1], middle[e])
        for s in range(count):
            for d in range(4):
                pieces[n, d] = stack[s, d]
            parent[n] = t
            n += 1
    return n


def split_edges(tets: Ints, edges: Ints, edge_of_tet: Ints, *, middle: Ints, rank: Ints) -> tuple[Ints, Ints]:
    """Cut tets at marked edges, in one global order, so that neighbours agree.

    Parameters
    ----------
    tets : (m, 4) int64
    edges : (e, 2) int64
    edge_of_tet : (m, 6) int64
    middle : (e,) int64
        Number of the new point on each edge, -1 where the edge stays.
    rank : (e,) int64
        Of the edges with a new point: distinct; smaller is cut first.

    Returns
    -------
    tets : (k, 4) int64
        Orientation of each tet kept when the new points lie on their edges.
    parent : (k,) int64
        The old tet each came from; ascending.
    """
    touched = np.flatnonzero((middle >= 0)[edge_of_tet].any(axis=1))
    some = edge_of_tet[touched]
    marked = middle[some] >= 0
    n_cuts = marked.sum(axis=1)
    order = np.argsort(np.where(marked, rank[some], np.iinfo(np.int64).max), axis=1, kind="stable")
    room = int(MOST_PIECES[n_cuts].sum())
    pieces, source = np.empty((room, 4), np.int64), np.empty(room, np.int64)
    stack = np.empty((int(MOST_PIECES[-1]) + 1, 4), np.int64)
    n = _split(tets[touched], some, edges, middle, order, n_cuts, pieces, source, stack)
    n_pieces = np.ones(len(tets), np.int64)
    n_pieces[touched] = np.bincount(source[:n], minlength=len(touched))
    parent = np.repeat(np.arange(len(tets)), n_pieces)
    split = tets[parent]
    split[(n_pieces > 1)[parent]] = pieces[:n]
    return split, parent


def edge_lengths(points: Floats, edges: Ints) -> Floats:
    """(e,) lengths, mm."""
    lengths = np.empty(len(edges))
    _fill_lengths(points, edges, lengths)
    return lengths


@kernel
def _fill_lengths(points, edges, lengths):  # type: ignore[no-untyped-def]
    for e in range(edges.shape[0]):
        a, b = edges[e, 0], edges[e, 1]
        x, y, z = points[a, 0] - points[b, 0], points[a, 1] - points[b, 1], points[a, 2] - points[b, 2]
        lengths[e] = np.sqrt(x * x + y * y + z * z)


def longest_first(lengths: Floats) -> Ints:
    """Rank of each edge: longest first, equal ones (to a billionth) by number."""
    rank = np.empty(len(lengths), np.int64)
    rank[np.lexsort((np.arange(len(lengths)), -np.round(lengths, 9)))] = np.arange(len(lengths))
    return rank


def rank_of(chosen: NDArray[np.bool_], lengths: Floats) -> Ints:
    """(e,) rank of each of the chosen edges among them, longest first; 0 for the others."""
    rank = np.zeros(len(lengths), np.int64)
    rank[chosen] = longest_first(lengths[chosen])
    return rank


def bisected(
    points: Floats, tets: Ints, edges: Ints, edge_of_tet: Ints, *, marked: NDArray[np.bool_]
) -> tuple[Floats, Ints]:
    """Halve the longest edge of the marked tets, and whatever conformity asks for (Rivara 1984).

    Parameters
    ----------
    edges, edge_of_tet : arrays
        Of these tets; see `topology.unique_edges`.
    marked : (m,) bool

    Returns
    -------
    points : (n + k, 3) float64, mm
        The old points first.
    tets : (m', 4) int64
        Positive.
    """
    lengths = edge_lengths(points, edges)
    cut, asking = np.zeros(len(edges), bool), np.flatnonzero(marked)
    while len(asking):
        before = int(cut.sum())
        cut[_longest_of(edge_of_tet[asking], lengths)] = True
        if int(cut.sum()) == before:
            break
        asking = np.flatnonzero(cut[edge_of_tet].any(axis=1))
    middle = np.full(len(edges), -1, np.int64)
    middle[cut] = len(points) + np.arange(cut.sum())
    halves = 0.5 * (points[edges[cut, 0]] + points[edges[cut, 1]])
    rank = rank_of(cut, lengths)
    pieces, _ = split_edges(tets, edges, edge_of_tet, middle=middle, rank=rank)
    return np.concatenate([points, halves]), pieces


def _longest_of(edge_of_tet: Ints, lengths: Floats) -> Ints:
    """(m,) the edge of each tet that `longest_first` puts first."""
    rounded = np.round(lengths[edge_of_tet], 9)
    longest = rounded == rounded.max(axis=1, keepdims=True)
    return np.asarray(np.where(longest, edge_of_tet, len(lengths)).min(axis=1))
