"""Which tets, faces and edges belong together."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.compiled import kernel
from volmap.kernels.tets import FACES

Ints = NDArray[np.int64]
Faces = tuple[Ints, Ints, Ints]

# Which of the six edges of a tet (`tets.EDGES`) joins two of its corners.
EDGE_BETWEEN = np.array([[-1, 0, 1, 2], [0, -1, 3, 4], [1, 3, -1, 5], [2, 4, 5, -1]])


def unique_edges(tets: Ints) -> tuple[Ints, Ints]:
    """Edges of a mesh.

    Returns
    -------
    edges : (e, 2) int64
        Each once, smaller point first, sorted.
    edge_of_tet : (m, 6) int64
        In the order of `tets.EDGES`.
    """
    tets = plain(tets, np.int64)
    start, cell = incidence(tets, int(tets.max()) + 1)
    edges, edge_of_tet = np.empty((tets.size * 3 // 2, 2), np.int64), np.empty((len(tets), 6), np.int64)
    n_edges = _fill_edges(tets, start, cell, edges, edge_of_tet)
    return edges[:n_edges].copy(), edge_of_tet


@kernel
def _fill_edges(tets, start, cell, edges, edge_of_tet):  # type: ignore[no-untyped-def]
    """Point after point, its larger neighbours in order; returns the number of edges.

    The room for edges that do not exist is never touched, so it takes no memory.
    """
    n = 0
    for v in range(start.shape[0] - 1):
        first = n
        for s in range(start[v], start[v + 1]):
            for d in range(4):
                other = tets[cell[s], d]
                if other <= v:
                    continue
                at = n
                while at > first and edges[at - 1, 1] > other:
                    at -= 1
                if at > first and edges[at - 1, 1] == other:
                    continue
                for q in range(n, at, -1):
                    edges[q, 1] = edges[q - 1, 1]
                edges[at, 1] = other
                edges[n, 0] = v
                n += 1
        for s in range(start[v], start[v + 1]):
            t = cell[s]
            at = 0
            while tets[t, at] != v:
                at += 1
            for d in range(4):
                if tets[t, d] > v:
                    e = first
                    while edges[e, 1] != tets[t, d]:
                        e += 1
                    edge_of_tet[t, EDGE_BETWEEN[at, d]] = e
    return n


def match_faces(tets: Ints) -> Faces:
    """Faces shared by two tets, and faces of the hull; a face is ``4 * tet + corner opposite``.

    Returns
    -------
    first, second : (k,) int64
        The two sides of each shared face, in the order of the face's sorted corners.
    hull : (h,) int64
    """
    tets = plain(tets, np.int64)
    start, cell = incidence(tets, int(tets.max()) + 1)
    room = 3 * int(np.diff(start).max())  # faces around one point
    shared, lonely = np.empty((tets.size, 2), np.int64), np.zeros(tets.size, np.bool_)
    n_shared = _fill_faces(tets, start, cell, np.empty((room, 2), np.int64), shared, lonely)
    return shared[:n_shared, 0].copy(), shared[:n_shared, 1].copy(), np.flatnonzero(lonely)


@kernel
def _fill_faces(tets, start, cell, row, shared, lonely):  # type: ignore[no-untyped-def]
    """Point after point, the faces of which it is the smallest corner; returns the number of shared faces."""
    n_points, n_shared = start.shape[0] - 1, 0
    for v in range(n_points):
        n = 0
        for s in range(start[v], start[v + 1]):
            t = cell[s]
            for f in range(4):
                low, high, n_larger = np.int64(n_points), np.int64(-1), 0
                for d in range(4):
                    if d != f and tets[t, d] > v:
                        low, high, n_larger = min(low, tets[t, d]), max(high, tets[t, d]), n_larger + 1
                if n_larger < 2 or tets[t, f] == v:
                    continue
                key, at = low * n_points + high, n
                while at > 0 and row[at - 1, 0] > key:
                    row[at, 0], row[at, 1] = row[at - 1, 0], row[at - 1, 1]
                    at -= 1
                row[at, 0], row[at, 1] = key, 4 * t + f
                n += 1
        for q in range(n):
            as_before, as_after = (
                q > 0 and row[q - 1, 0] == row[q, 0],
                q + 1 < n and row[q + 1, 0] == row[q, 0],
            )
            if as_after:
                shared[n_shared, 0], shared[n_shared, 1] = row[q, 1], row[q + 1, 1]
                n_shared += 1
            lonely[row[q, 1]] = not (as_before or as_after)
    return n_shared


def face_corners(tets: Ints, faces: Ints) -> Ints:
    """(k, 3) corners of the faces ``4 * tet + corner``, counter-clockwise from outside the tet."""
    return np.asarray(tets[faces // 4][np.arange(len(faces))[:, None], FACES[faces % 4]])


def interfaces(tets: Ints, labels: Ints, faces: Faces | None = None) -> tuple[Ints, Ints]:
    """Every face between two labels or between a label and the outside.

    Parameters
    ----------
    faces : optional
        Of `match_faces`, where they are at hand.

    Returns
    -------
    triangles : (k, 3) int64
        The normal points from the larger label (inside) to the smaller one.
    sides : (k, 2) int64
        (inside, outside); 0 is outside the body.
    """
    first, second, hull = faces or match_faces(tets)
    a, b = labels[first // 4], labels[second // 4]
    split = a != b
    inner = np.where(a > b, first, second)[split]
    triangles = np.concatenate([face_corners(tets, inner), face_corners(tets, hull)])
    sides = np.concatenate(
        [
            np.stack([np.maximum(a, b)[split], np.minimum(a, b)[split]], axis=1),
            np.stack([labels[hull // 4], np.zeros(len(hull), np.int64)], axis=1),
        ]
    )
    order = np.lexsort((triangles[:, 0], sides[:, 1], sides[:, 0]))
    return triangles[order], sides[order]


def incidence(cells: Ints, n_points: int) -> tuple[Ints, Ints]:
    """Which cells hold each point, as a compressed list.

    Returns
    -------
    start : (n_points + 1,) int64
    cell : (cells.size,) int64
        Cells of point p are ``cell[start[p]:start[p + 1]]``, ascending.
    """
    start, cell = np.zeros(n_points + 1, np.int64), np.empty(cells.size, np.int64)
    _fill_incidence(cells, start, cell)
    return start, cell


@kernel
def _fill_incidence(cells, start, cell):  # type: ignore[no-untyped-def]
    """Count, add up, and lay down from the last cell to the first."""
    for t in range(cells.shape[0]):
        for d in range(cells.shape[1]):
            start[cells[t, d]] += 1
    for v in range(1, start.shape[0]):
        start[v] += start[v - 1]
    for t in range(cells.shape[0] - 1, -1, -1):
        for d in range(cells.shape[1]):
            start[cells[t, d]] -= 1
            cell[start[cells[t, d]]] = t


def label_sets(tets: Ints, labels: Ints, hull: Ints, n_points: int, *, most: int) -> Ints:
    """(n, most) labels around each point, ascending, filled up with -1; points of the hull also have 0.

    Parameters
    ----------
    hull : (h,) int64
        Faces, as `match_faces` gives them.
    """
    sets = np.full((n_points, most), -1, np.int64)
    sets[face_corners(tets, hull), 0] = 0
    _fill_label_sets(tets, labels, sets)
    return sets


@kernel
def _fill_label_sets(tets, labels, sets):  # type: ignore[no-untyped-def]
    """Add the label of each tet to the sets of its corners; of too many labels the largest fall out."""
    most = sets.shape[1]
    for t in range(tets.shape[0]):
        label = labels[t]
        for d in range(4):
            v, at = tets[t, d], 0
            while at < most and 0 <= sets[v, at] < label:
                at += 1
            if at == most or sets[v, at] == label:
                continue
            for q in range(most - 1, at, -1):
                sets[v, q] = sets[v, q - 1]
            sets[v, at] = label
