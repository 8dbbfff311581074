"""A symmetric block-sparse matrix on the edges of a mesh.

The pattern is fixed by the mesh: one 3x3 block a point and two an edge, stored row by row, so that a product
reads them in one sweep.  Blocks are float32: they are a model of the objective, and rounding the model moves
neither its value nor its gradient.  Contributions of tets are gathered, never scattered, so that sums come in
one order on any number of threads.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import kernel
from volmap.kernels.tets import EDGES
from volmap.kernels.threads import on_threads
from volmap.kernels.topology import unique_edges

FEWEST_ROWS = 4096  # a thread multiplies: waking one takes as long as some thousand rows

Ints = NDArray[np.int32]
Floats = NDArray[np.float64]
Singles = NDArray[np.float32]


class Pattern(NamedTuple):
    """Where the blocks of a mesh's matrix are; all of int32.

    Parameters
    ----------
    edges : (e, 2)
        Smaller point first, sorted.
    edge_of_tet : (m, 6)
    edge_start, edge_item : (e + 1,), (6 m,)
        Blocks of tets that add up on each edge: ``2 * (6 * tet + pair)``, and one more where the
        tet's pair runs from the larger point to the smaller one.
    edge_slot : (e, 2)
        Places of an edge's block: in the row of its smaller and of its larger point.
    corner_start, corner_item : (n + 1,), (4 m,)
        Corners of tets (``4 * tet + corner``) at each point.
    row_start, row_column : (n + 1,), (n + 2 e,)
        Blocks of each row, by column.
    own_slot : (n,)
        Place of each point's own block.
    """

    edges: Ints
    edge_of_tet: Ints
    edge_start: Ints
    edge_item: Ints
    edge_slot: Ints
    corner_start: Ints
    corner_item: Ints
    row_start: Ints
    row_column: Ints
    own_slot: Ints


def _starts(keys: NDArray[np.int64], n: int) -> Ints:
    start = np.zeros(n + 1, np.int32)
    np.cumsum(np.bincount(keys, minlength=n), out=start[1:])
    return start


def pattern_of(tets: NDArray[np.int64], n_points: int) -> Pattern:
    """The pattern of a mesh.

    Parameters
    ----------
    tets : (m, 4) int64
    n_points : int
    """
    edges, edge_of_tet = unique_edges(tets)
    n, e = n_points, len(edges)
    item = np.argsort(edge_of_tet.ravel(), kind="stable")
    turned = (tets[:, EDGES[:, 0]] > tets[:, EDGES[:, 1]]).ravel()
    rows = np.concatenate([np.arange(n), edges[:, 0], edges[:, 1]])
    columns = np.concatenate([np.arange(n), edges[:, 1], edges[:, 0]])
    order = np.argsort(rows * np.int64(n) + columns)
    slot = np.empty(n + 2 * e, np.int32)
    slot[order] = np.arange(n + 2 * e, dtype=np.int32)
    return Pattern(
        edges.astype(np.int32),
        edge_of_tet.astype(np.int32),
        _starts(edge_of_tet.ravel(), e),
        (2 * item + turned[item]).astype(np.int32),
        np.ascontiguousarray(slot[n:].reshape(2, e).T),
        _starts(tets.ravel(), n),
        np.argsort(tets.ravel(), kind="stable").astype(np.int32),
        _starts(rows, n),
        columns[order].astype(np.int32),
        slot[:n].copy(),
    )


def gather(pattern: Pattern, forces: Floats, blocks: Singles, gradient: Floats, rows: Singles) -> None:
    """Sum the parts of tets: gradient (n, 3) float64 and rows (n + 2 e, 3, 3) float32, both overwritten.

    Parameters
    ----------
    forces : (m, 4, 3) float64
    blocks : (m, 6, 3, 3) float32
        As `distortion.derivatives` writes them.
    """
    p = pattern
    on_threads(_gather_edges, len(p.edges), p.edge_start, p.edge_item, p.edge_slot, blocks, rows)
    on_threads(
        _gather_points,
        len(gradient),
        p.row_start,
        p.own_slot,
        p.corner_start,
        p.corner_item,
        forces,
        gradient,
        rows,
    )


@kernel
def _gather_edges(first, last, edge_start, edge_item, edge_slot, blocks, rows):  # type: ignore[no-untyped-def]
    total = np.empty((3, 3))
    for e in range(first, last):
        for i in range(3):
            for j in range(3):
                total[i, j] = 0.0
        for k in range(edge_start[e], edge_start[e + 1]):
            place = edge_item[k] >> 1
            t, pair = place // 6, place % 6
            for i in range(3):
                for j in range(3):
                    if edge_item[k] & 1:
                        total[i, j] += blocks[t, pair, j, i]
                    else:
                        total[i, j] += blocks[t, pair, i, j]
        for i in range(3):
            for j in range(3):
                rows[edge_slot[e, 0], i, j] = total[i, j]
                rows[edge_slot[e, 1], j, i] = total[i, j]


@kernel
def _gather_points(first, last, row_start, own_slot, corner_start, corner_item, forces, gradient, rows):  # type: ignore[no-untyped-def]
    """A point's own block is minus the other blocks of its row: a shift of all points costs nothing."""
    total = np.empty((3, 3))
    for p in range(first, last):
        for i in range(3):
            gradient[p, i] = 0.0
            for j in range(3):
                total[i, j] = 0.0
        for k in range(row_start[p], row_start[p + 1]):
            if k != own_slot[p]:
                for i in range(3):
                    for j in range(3):
                        total[i, j] -= rows[k, i, j]
        for i in range(3):
            for j in range(3):
                rows[own_slot[p], i, j] = total[i, j]
        for k in range(corner_start[p], corner_start[p + 1]):
            for i in range(3):
                gradient[p, i] += forces[corner_item[k] >> 2, corner_item[k] & 3, i]


def multiply(row_start: Ints, row_column: Ints, rows: Singles, x: Floats, out: Floats) -> None:
    """out = A x, both (n, 3); for any matrix of 3x3 blocks stored row by row."""
    on_threads(_multiply, len(row_start) - 1, row_start, row_column, rows, x, out, fewest=FEWEST_ROWS)


@kernel
def _multiply(first, last, row_start, row_column, rows, x, out):  # type: ignore[no-untyped-def]
    for p in range(first, last):
        a, b, c = 0.0, 0.0, 0.0
        for k in range(row_start[p], row_start[p + 1]):
            q = row_column[k]
            u, v, w = x[q, 0], x[q, 1], x[q, 2]
            a += rows[k, 0, 0] * u + rows[k, 0, 1] * v + rows[k, 0, 2] * w
            b += rows[k, 1, 0] * u + rows[k, 1, 1] * v + rows[k, 1, 2] * w
            c += rows[k, 2, 0] * u + rows[k, 2, 1] * v + rows[k, 2, 2] * w
        out[p, 0], out[p, 1], out[p, 2] = a, b, c
