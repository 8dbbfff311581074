"""Exact closest points on triangles, through a tree of boxes.

The tree is built once for a set of triangles; when their points move it is `refitted`, not rebuilt.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

LEAF = 4  # triangles in a leaf, at most
DEPTH = 64  # room on the search stack; the tree is balanced, so its depth is log2 of the triangles


class Tree(NamedTuple):
    """Boxes around triangles.

    Parameters
    ----------
    low, high : (k, 3) float64
        Corners of the boxes; node 0 is the root.
    child : (k,) int64
        First child (the second one follows it), or -1 for a leaf.
    first, last : (k,) int64
        Range of `order` that a node holds.
    order : (m,) int64
        Triangles, leaf by leaf.
    """

    low: NDArray[np.float64]
    high: NDArray[np.float64]
    child: NDArray[np.int64]
    first: NDArray[np.int64]
    last: NDArray[np.int64]
    order: NDArray[np.int64]


def build_tree(points: NDArray[np.float64], triangles: NDArray[np.int64]) -> Tree:
    """A balanced tree over triangles.

    Parameters
    ----------
    points : (n, 3) float64, mm
    triangles : (m, 3) int64, m >= 1
    """
    centres = points[triangles].mean(axis=1)
    child, first, last, order = _split(centres)
    k = len(child)
    tree = Tree(np.empty((k, 3)), np.empty((k, 3)), child, first, last, order)
    refit(tree, np.array(points), np.array(triangles))
    return tree


def _split(
    centres: NDArray[np.float64],
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Halve the triangles along the longest side of their centres' box until a leaf holds few.

    All nodes of a level at once; child, first and last of the nodes level by level, and the order.
    """
    order = np.arange(len(centres))
    child: list[NDArray[np.int64]] = []
    first, last = [np.zeros(1, np.int64)], [np.full(1, len(centres))]
    n_nodes = 1
    while len(first[-1]):
        begin, end = first[-1], last[-1]
        large = end - begin > LEAF
        child.append(np.where(large, n_nodes + 2 * (np.cumsum(large) - 1), -1))
        begin, end = begin[large], end[large]
        n_nodes += 2 * len(begin)
        if len(begin):
            _sort_level(centres, order, begin, end - begin)
        middle = (begin + end) // 2
        first.append(np.stack([begin, middle], axis=1).ravel())
        last.append(np.stack([middle, end], axis=1).ravel())
    return np.concatenate(child), np.concatenate(first), np.concatenate(last), order


def _sort_level(
    centres: NDArray[np.float64], order: NDArray[np.int64], begin: NDArray[np.int64], size: NDArray[np.int64]
) -> None:
    """Sort what each node of a level holds along its longest side, in place; equal ones keep their order."""
    start = np.cumsum(size) - size
    node = np.repeat(np.arange(len(size)), size)
    held = np.arange(len(node)) + (begin - start)[node]
    members = order[held]
    places = centres[members]
    axis = (np.maximum.reduceat(places, start) - np.minimum.reduceat(places, start)).argmax(axis=1)
    order[held] = members[np.lexsort((places[np.arange(len(node)), axis[node]], node))]


@kernel
def refit(tree, points, triangles):  # type: ignore[no-untyped-def]
    """Set the boxes of a tree to where the points are now (in place)."""
    for node in range(len(tree.child) - 1, -1, -1):
        c = tree.child[node]
        for d in range(3):
            low = np.inf
            high = -np.inf
            if c >= 0:
                low = min(tree.low[c, d], tree.low[c + 1, d])
                high = max(tree.high[c, d], tree.high[c + 1, d])
            else:
                for i in range(tree.first[node], tree.last[node]):
                    t = tree.order[i]
                    for k in range(3):
                        low = min(low, points[triangles[t, k], d])
                        high = max(high, points[triangles[t, k], d])
            tree.low[node, d] = low
            tree.high[node, d] = high


@inner_kernel
def on_triangle(px, py, pz, points, a, b, c):  # type: ignore[no-untyped-def]
    """Barycentric coordinates of the point of triangle abc closest to p, and the squared distance.

    Regions of the triangle after Ericson, Real-Time Collision Detection (2005), section 5.1.5.
    """
    ax, ay, az = points[a, 0], points[a, 1], points[a, 2]
    abx, aby, abz = points[b, 0] - ax, points[b, 1] - ay, points[b, 2] - az
    acx, acy, acz = points[c, 0] - ax, points[c, 1] - ay, points[c, 2] - az
    apx, apy, apz = px - ax, py - ay, pz - az
    d1 = abx * apx + aby * apy + abz * apz
    d2 = acx * apx + acy * apy + acz * apz
    bpx, bpy, bpz = apx - abx, apy - aby, apz - abz
    d3 = abx * bpx + aby * bpy + abz * bpz
    d4 = acx * bpx + acy * bpy + acz * bpz
    cpx, cpy, cpz = apx - acx, apy - acy, apz - acz
    d5 = abx * cpx + aby * cpy + abz * cpz
    d6 = acx * cpx + acy * cpy + acz * cpz
    va = d3 * d6 - d5 * d4
    vb = d5 * d2 - d1 * d6
    vc = d1 * d4 - d3 * d2
    if d1 <= 0.0 and d2 <= 0.0:
        v, w = 0.0, 0.0
    elif d3 >= 0.0 and d4 <= d3:
        v, w = 1.0, 0.0
    elif vc <= 0.0 and d1 >= 0.0 and d3 <= 0.0:
        v, w = d1 / (d1 - d3) if d1 > d3 else 0.0, 0.0
    elif d6 >= 0.0 and d5 <= d6:
        v, w = 0.0, 1.0
    elif vb <= 0.0 and d2 >= 0.0 and d6 <= 0.0:
        v, w = 0.0, d2 / (d2 - d6) if d2 > d6 else 0.0
    elif va <= 0.0 and d4 - d3 >= 0.0 and d5 - d6 >= 0.0:
        span = (d4 - d3) + (d5 - d6)
        w = (d4 - d3) / span if span > 0.0 else 0.0
        v = 1.0 - w
    else:
        total = va + vb + vc
        v, w = (vb / total, vc / total) if total > 0.0 else (0.0, 0.0)
    rx = apx - v * abx - w * acx
    ry = apy - v * aby - w * acy
    rz = apz - v * abz - w * acz
    return 1.0 - v - w, v, w, rx * rx + ry * ry + rz * rz


@inner_kernel
def _box_distance(tree, node, px, py, pz):  # type: ignore[no-untyped-def]
    dx = max(tree.low[node, 0] - px, 0.0, px - tree.high[node, 0])
    dy = max(tree.low[node, 1] - py, 0.0, py - tree.high[node, 1])
    dz = max(tree.low[node, 2] - pz, 0.0, pz - tree.high[node, 2])
    return dx * dx + dy * dy + dz * dz


@kernel
def _closest_from(  # type: ignore[no-untyped-def]
    begin, end, tree, points, triangles, queries, guess, triangle, barycentric, squared
):
    """Closest points, each search starting from a guessed triangle (-1: none); results in place."""
    stack = np.empty(DEPTH, np.int64)
    for q in range(begin, end):
        px, py, pz = queries[q, 0], queries[q, 1], queries[q, 2]
        best = np.inf
        found = -1
        u0, v0, w0 = 0.0, 0.0, 0.0
        if guess[q] >= 0:
            found = guess[q]
            a, b, c = triangles[found, 0], triangles[found, 1], triangles[found, 2]
            u0, v0, w0, best = on_triangle(px, py, pz, points, a, b, c)
        stack[0] = 0
        size = 1
        while size > 0:
            size -= 1
            node = stack[size]
            if _box_distance(tree, node, px, py, pz) > best:
                continue
            near = tree.child[node]
            if near < 0:
                for i in range(tree.first[node], tree.last[node]):
                    t = tree.order[i]
                    a, b, c = triangles[t, 0], triangles[t, 1], triangles[t, 2]
                    u, v, w, s = on_triangle(px, py, pz, points, a, b, c)
                    if s < best or (s == best and t < found):
                        best = s
                        found = t
                        u0, v0, w0 = u, v, w
                continue
            far = near + 1
            if _box_distance(tree, far, px, py, pz) < _box_distance(tree, near, px, py, pz):
                near, far = far, near
            stack[size] = far
            stack[size + 1] = near
            size += 2
        triangle[q] = found
        barycentric[q, 0] = u0
        barycentric[q, 1] = v0
        barycentric[q, 2] = w0
        squared[q] = best


def closest(
    tree: Tree,
    points: NDArray[np.float64],
    triangles: NDArray[np.int64],
    queries: NDArray[np.float64],
    *,
    guess: NDArray[np.int64] | None = None,
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
    """The closest point of a triangle set to each query.

    Parameters
    ----------
    tree : Tree
        Of these triangles, fitted to these points.
    points, triangles : (n, 3) float64 mm, (m, 3) int64
        Writable arrays (see the note on read-only arrays in DEVELOPERS.md).
    queries : (q, 3) float64, mm
    guess : (q,) int64, optional
        A triangle likely to be near, or -1; changes the time, not the distance.

    Returns
    -------
    triangle : (q,) int64
    barycentric : (q, 3) float64
    squared_mm : (q,) float64
        Squared distance, mm2.
    """
    n = len(queries)
    triangle, barycentric, squared = np.empty(n, np.int64), np.empty((n, 3)), np.empty(n)
    start = np.full(n, -1) if guess is None else guess
    on_threads(_closest_from, n, tree, points, triangles, queries, start, triangle, barycentric, squared)
    return triangle, barycentric, squared
