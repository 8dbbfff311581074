"""A symmetric block-sparse matrix on the edges of a mesh, and conjugate gradients with it.

The pattern is fixed by the mesh: one 3x3 block an edge (rows of its smaller point), one a point.
Contributions of tets are gathered, never scattered, and products are summed chunk by chunk, so that sums come
in one order on any number of threads.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from volmap.kernels.tets import EDGES
from volmap.kernels.ties import add_diagonal, add_product
from volmap.kernels.topology import unique_edges

CHUNK = 512  # points whose products one thread sums

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


class Pattern(NamedTuple):
    """Where the blocks of a mesh's matrix are.

    Parameters
    ----------
    edges : (e, 2) int64
        Smaller point first, sorted.
    edge_of_tet : (m, 6) int64
    edge_start, edge_item : (e + 1,), (6 m,) int64
        Blocks of tets (``6 * tet + pair``) that add up on each edge.
    edge_flip : (6 m,) bool
        True where the tet's pair runs from the larger point to the smaller one.
    corner_start, corner_item : (n + 1,), (4 m,) int64
        Corners of tets (``4 * tet + corner``) at each point.
    row_start, row_edge : (n + 1,), (2 e,) int64
        Edges of each point, by neighbour.
    row_column : (2 e,) int64
        The neighbour; a block is transposed where it is the smaller point.
    """

    edges: Ints
    edge_of_tet: Ints
    edge_start: Ints
    edge_item: Ints
    edge_flip: NDArray[np.bool_]
    corner_start: Ints
    corner_item: Ints
    row_start: Ints
    row_edge: Ints
    row_column: Ints


def _grouped(keys: Ints, n: int) -> tuple[Ints, Ints]:
    start = np.zeros(n + 1, np.int64)
    np.cumsum(np.bincount(keys, minlength=n), out=start[1:])
    return start, np.argsort(keys, kind="stable")


def pattern_of(tets: Ints, n_points: int) -> Pattern:
    """The pattern of a mesh.

    Parameters
    ----------
    tets : (m, 4) int64
    n_points : int
    """
    edges, edge_of_tet = unique_edges(tets)
    edge_start, edge_item = _grouped(edge_of_tet.ravel(), len(edges))
    corner_start, corner_item = _grouped(tets.ravel(), n_points)
    flip = (tets[:, EDGES[:, 0]] > tets[:, EDGES[:, 1]]).ravel()
    ends = np.concatenate([edges[:, 0], edges[:, 1]])
    others = np.concatenate([edges[:, 1], edges[:, 0]])
    order = np.lexsort((others, ends))
    row_start = np.zeros(n_points + 1, np.int64)
    np.cumsum(np.bincount(ends, minlength=n_points), out=row_start[1:])
    return Pattern(
        edges,
        edge_of_tet,
        edge_start,
        edge_item,
        flip,
        corner_start,
        corner_item,
        row_start,
        order % len(edges),
        others[order],
    )


@njit(cache=True, parallel=True)
def gather(pattern, forces, blocks, gradient, diagonal, off_diagonal):  # type: ignore[no-untyped-def]
    """Sum the parts of tets: gradient (n, 3), diagonal (n, 3, 3), off_diagonal (e, 3, 3), all overwritten."""
    flat_forces = forces.reshape((-1, 3))
    flat_blocks = blocks.reshape((-1, 3, 3))
    for e in prange(len(pattern.edges)):
        for i in range(3):
            for j in range(3):
                off_diagonal[e, i, j] = 0.0
        for k in range(pattern.edge_start[e], pattern.edge_start[e + 1]):
            item = pattern.edge_item[k]
            if pattern.edge_flip[item]:
                for i in range(3):
                    for j in range(3):
                        off_diagonal[e, i, j] += flat_blocks[item, j, i]
            else:
                for i in range(3):
                    for j in range(3):
                        off_diagonal[e, i, j] += flat_blocks[item, i, j]
    for p in prange(len(gradient)):
        for i in range(3):
            gradient[p, i] = 0.0
            for j in range(3):
                diagonal[p, i, j] = 0.0
        for k in range(pattern.corner_start[p], pattern.corner_start[p + 1]):
            for i in range(3):
                gradient[p, i] += flat_forces[pattern.corner_item[k], i]
        for k in range(pattern.row_start[p], pattern.row_start[p + 1]):
            e = pattern.row_edge[k]
            transposed = pattern.row_column[k] < p
            for i in range(3):
                for j in range(3):
                    diagonal[p, i, j] -= off_diagonal[e, j, i] if transposed else off_diagonal[e, i, j]


@njit(cache=True, parallel=True)
def multiply(pattern, diagonal, off_diagonal, x, out):  # type: ignore[no-untyped-def]
    """out = A x, both (n, 3)."""
    for p in prange(len(x)):
        a = diagonal[p, 0, 0] * x[p, 0] + diagonal[p, 0, 1] * x[p, 1] + diagonal[p, 0, 2] * x[p, 2]
        b = diagonal[p, 1, 0] * x[p, 0] + diagonal[p, 1, 1] * x[p, 1] + diagonal[p, 1, 2] * x[p, 2]
        c = diagonal[p, 2, 0] * x[p, 0] + diagonal[p, 2, 1] * x[p, 1] + diagonal[p, 2, 2] * x[p, 2]
        for k in range(pattern.row_start[p], pattern.row_start[p + 1]):
            e = pattern.row_edge[k]
            q = pattern.row_column[k]
            u, v, w = x[q, 0], x[q, 1], x[q, 2]
            if q > p:
                a += off_diagonal[e, 0, 0] * u + off_diagonal[e, 0, 1] * v + off_diagonal[e, 0, 2] * w
                b += off_diagonal[e, 1, 0] * u + off_diagonal[e, 1, 1] * v + off_diagonal[e, 1, 2] * w
                c += off_diagonal[e, 2, 0] * u + off_diagonal[e, 2, 1] * v + off_diagonal[e, 2, 2] * w
            else:
                a += off_diagonal[e, 0, 0] * u + off_diagonal[e, 1, 0] * v + off_diagonal[e, 2, 0] * w
                b += off_diagonal[e, 0, 1] * u + off_diagonal[e, 1, 1] * v + off_diagonal[e, 2, 1] * w
                c += off_diagonal[e, 0, 2] * u + off_diagonal[e, 1, 2] * v + off_diagonal[e, 2, 2] * w
        out[p, 0], out[p, 1], out[p, 2] = a, b, c


@njit(cache=True, parallel=True)
def invert_blocks(diagonal, out):  # type: ignore[no-untyped-def]
    """Inverse of each symmetric 3x3 block, (n, 3, 3)."""
    for p in prange(len(diagonal)):
        a, b, c = diagonal[p, 0, 0], diagonal[p, 0, 1], diagonal[p, 0, 2]
        d, e, f = diagonal[p, 1, 1], diagonal[p, 1, 2], diagonal[p, 2, 2]
        aa, bb, cc = d * f - e * e, c * e - b * f, b * e - c * d
        det = a * aa + b * bb + c * cc
        out[p, 0, 0], out[p, 1, 1], out[p, 2, 2] = aa / det, (a * f - c * c) / det, (a * d - b * b) / det
        out[p, 0, 1] = out[p, 1, 0] = bb / det
        out[p, 0, 2] = out[p, 2, 0] = cc / det
        out[p, 1, 2] = out[p, 2, 1] = (b * c - a * e) / det


@njit(cache=True, parallel=True)
def _advance(x, r, z, d, ad, inverse, alpha):  # type: ignore[no-untyped-def]
    """x += alpha d, r -= alpha A d, z = M^-1 r; returns r.z and r.r."""
    n = len(x)
    sums = np.zeros(((n + CHUNK - 1) // CHUNK, 2))
    for chunk in prange(len(sums)):
        for p in range(chunk * CHUNK, min(n, (chunk + 1) * CHUNK)):
            for i in range(3):
                x[p, i] += alpha * d[p, i]
                r[p, i] -= alpha * ad[p, i]
            for i in range(3):
                z[p, i] = inverse[p, i, 0] * r[p, 0] + inverse[p, i, 1] * r[p, 1] + inverse[p, i, 2] * r[p, 2]
            sums[chunk, 0] += r[p, 0] * z[p, 0] + r[p, 1] * z[p, 1] + r[p, 2] * z[p, 2]
            sums[chunk, 1] += r[p, 0] * r[p, 0] + r[p, 1] * r[p, 1] + r[p, 2] * r[p, 2]
    rz = 0.0
    rr = 0.0
    for k in range(len(sums)):
        rz += sums[k, 0]
        rr += sums[k, 1]
    return rz, rr


@njit(cache=True, parallel=True)
def _turn(d, z, share):  # type: ignore[no-untyped-def]
    """d = z + share d."""
    for p in prange(len(d)):
        for i in range(3):
            d[p, i] = z[p, i] + share * d[p, i]


@njit(cache=True, parallel=True)
def _dot(a, b):  # type: ignore[no-untyped-def]
    n = len(a)
    sums = np.zeros((n + CHUNK - 1) // CHUNK)
    for chunk in prange(len(sums)):
        for p in range(chunk * CHUNK, min(n, (chunk + 1) * CHUNK)):
            sums[chunk] += a[p, 0] * b[p, 0] + a[p, 1] * b[p, 1] + a[p, 2] * b[p, 2]
    total = 0.0
    for k in range(len(sums)):
        total += sums[k]
    return total


@njit(cache=True)
def solve(pattern, diagonal, off_diagonal, ties, right, tolerance, most, x):  # type: ignore[no-untyped-def]
    """Conjugate gradients with the inverse diagonal blocks as preconditioner, from x = 0.

    Parameters
    ----------
    ties : Ties
        Stiffness beside the edges of the mesh; part of the matrix.
    right : (n, 3) float64
    tolerance : float
        Wanted ``|r| / |right|``.
    most : int
        Iterations at most.
    x : (n, 3) float64
        Overwritten.

    Returns
    -------
    int
        Iterations done.
    """
    n = len(right)
    inverse = np.empty((n, 3, 3))
    whole = diagonal.copy()
    add_diagonal(ties, whole)
    invert_blocks(whole, inverse)
    r, z, d, ad = right.copy(), np.zeros((n, 3)), np.zeros((n, 3)), np.zeros((n, 3))
    x[:] = 0.0
    rz, rr = _advance(x, r, z, d, ad, inverse, 0.0)
    goal = tolerance * tolerance * rr
    share = 0.0
    for k in range(most):
        if rr <= goal or rz <= 0.0:
            return k
        _turn(d, z, share)
        multiply(pattern, diagonal, off_diagonal, d, ad)
        add_product(ties, d, ad)
        curvature = _dot(d, ad)
        if curvature <= 0.0:
            return k
        before = rz
        rz, rr = _advance(x, r, z, d, ad, inverse, rz / curvature)
        share = rz / before
    return most
