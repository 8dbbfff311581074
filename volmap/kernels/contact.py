"""Keeping a moving triangle surface free of crossings.

A barrier (`barrier.py`) acts between parts that come nearer than a small distance, and every step is cut so
short that no two parts meet on the way (Li et al., ACM TOG 39(4), 2020, and 40(4), 2021: the barrier, and
additive continuous collision detection).  A surface that starts without crossings never gets one.

A pair is four points with weights: ``gap = sum_c weight_c x_c`` joins the closest points of a point and a
triangle (weights 1, -u, -v, -w) or of two edges (1 - s, s, t - 1, -t).
"""

from __future__ import annotations

from math import sqrt
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.closest import DEPTH, Tree, build_tree, on_triangle
from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

KEPT = 0.1  # share of a pair's distance that a step leaves at least
ROOM = 48  # near cells that a query has room for at first
ADVANCES = 500  # rounds of conservative advancement at most; stopping early is safe


class Skin(NamedTuple):
    """The surface that must not cross: its points, edges and triangles, with search trees.

    Parameters
    ----------
    points : (n, 3) int64
        Each point of the surface, three times over (a triangle without extent).
    edges : (e, 3) int64
        Each edge, its second point twice.
    triangles : (t, 3) int64
    point_tree, edge_tree, triangle_tree : Tree
    """

    points: Ints
    edges: Ints
    triangles: Ints
    point_tree: Tree
    edge_tree: Tree
    triangle_tree: Tree


def skin_of(points: Floats, triangles: Ints) -> Skin:
    """The skin of a triangle surface, for any later positions of its points.

    Parameters
    ----------
    points : (n, 3) float64, mm
    triangles : (t, 3) int64
    """
    used = np.unique(triangles)
    pairs = np.sort(triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    edges = np.unique(pairs, axis=0)[:, [0, 1, 1]]
    kinds = [np.ascontiguousarray(cells) for cells in (np.repeat(used[:, None], 3, axis=1), edges, triangles)]
    lone, edges, triangles = kinds
    return Skin(lone, edges, triangles, *(build_tree(points, cells) for cells in kinds))


class _Cells(NamedTuple):
    """Triples of points with their tree, and boxes (m, 6) around them in the tree's order."""

    corners: Ints
    tree: Tree
    boxes: Floats


@kernel
def _sweep(tree, cells, here, there, boxes):  # type: ignore[no-untyped-def]
    """Boxes around cells on their straight way from `here` to `there`.

    Those of the tree's nodes are set in place; those of the cells go into boxes (m, 6), in the tree's order.
    """
    for node in range(len(tree.child) - 1, -1, -1):
        c = tree.child[node]
        for d in range(3):
            low, high = np.inf, -np.inf
            if c >= 0:
                low = min(tree.low[c, d], tree.low[c + 1, d])
                high = max(tree.high[c, d], tree.high[c + 1, d])
            else:
                for i in range(tree.first[node], tree.last[node]):
                    least, most = np.inf, -np.inf
                    for k in range(3):
                        p = cells[tree.order[i], k]
                        least = min(least, here[p, d], there[p, d])
                        most = max(most, here[p, d], there[p, d])
                    boxes[i, d], boxes[i, d + 3] = least, most
                    low, high = min(low, least), max(high, most)
            tree.low[node, d] = low
            tree.high[node, d] = high


@inner_kernel
def _boxes_apart(boxes, i, margin, boxes2, j):  # type: ignore[no-untyped-def]
    """True when box i, wider by a margin, and box j of another list have nothing in common."""
    for d in range(3):
        if boxes[i, d] - margin > boxes2[j, d + 3] or boxes[i, d + 3] + margin < boxes2[j, d]:
            return True
    return False


@inner_kernel
def _share_a_point(queries, q, cells, c):  # type: ignore[no-untyped-def]
    for i in range(3):
        for j in range(3):
            if queries[q, i] == cells[c, j]:
                return True
    return False


@inner_kernel
def _edge_weights(x, weights):  # type: ignore[no-untyped-def]
    """Weights of the closest points of segments x0 x1 and x2 x3 into weights (4,)

    Cases after Ericson, Real-Time Collision Detection (2005), section 5.1.9.
    """
    a = e = b = c = f = 0.0
    for i in range(3):
        u = x[1, i] - x[0, i]
        v = x[3, i] - x[2, i]
        r = x[0, i] - x[2, i]
        a += u * u
        e += v * v
        b += u * v
        c += u * r
        f += v * r
    denominator = a * e - b * b
    s = 0.0
    if denominator > 1e-14 * a * e:
        s = min(max((b * f - c * e) / denominator, 0.0), 1.0)
    t = (b * s + f) / e if e > 0.0 else 0.0
    if t < 0.0:
        t = 0.0
        s = min(max(-c / a, 0.0), 1.0) if a > 0.0 else 0.0
    elif t > 1.0:
        t = 1.0
        s = min(max((b - c) / a, 0.0), 1.0) if a > 0.0 else 0.0
    weights[0], weights[1], weights[2], weights[3] = 1.0 - s, s, t - 1.0, -t


@inner_kernel
def _gap(of_edges, x, weights, gap):  # type: ignore[no-untyped-def]
    """Weights and gap vector of four places x (4, 3); returns the distance."""
    if of_edges:
        _edge_weights(x, weights)
    else:
        u, v, w, _ = on_triangle(x[0, 0], x[0, 1], x[0, 2], x, 1, 2, 3)
        weights[0], weights[1], weights[2], weights[3] = 1.0, -u, -v, -w
    squared = 0.0
    for i in range(3):
        gap[i] = 0.0
        for k in range(4):
            gap[i] += weights[k] * x[k, i]
        squared += gap[i] * gap[i]
    return sqrt(squared)


@inner_kernel
def _corners(of_edges, queries, q, cells, c, corners):  # type: ignore[no-untyped-def]
    corners[0] = queries[q, 0]
    if of_edges:
        corners[1], corners[2], corners[3] = queries[q, 1], cells[c, 0], cells[c, 1]
    else:
        corners[1], corners[2], corners[3] = cells[c, 0], cells[c, 1], cells[c, 2]


@inner_kernel
def _first_meeting(of_edges, x, p, longest, weights, gap):  # type: ignore[no-untyped-def]
    """A step in [0, longest] on which the four places x (4, 3), moving by p (4, 3), surely do not meet.

    x and p are work space and are changed.
    """
    for i in range(3):
        mean = 0.25 * (p[0, i] + p[1, i] + p[2, i] + p[3, i])
        for k in range(4):
            p[k, i] -= mean
    speed0 = sqrt(p[0, 0] ** 2 + p[0, 1] ** 2 + p[0, 2] ** 2)
    speed1 = sqrt(p[1, 0] ** 2 + p[1, 1] ** 2 + p[1, 2] ** 2)
    speed2 = sqrt(p[2, 0] ** 2 + p[2, 1] ** 2 + p[2, 2] ** 2)
    speed3 = sqrt(p[3, 0] ** 2 + p[3, 1] ** 2 + p[3, 2] ** 2)
    closing = max(speed0, speed1) + max(speed2, speed3) if of_edges else speed0 + max(speed1, speed2, speed3)
    distance = _gap(of_edges, x, weights, gap)
    if closing * longest <= (1.0 - KEPT) * distance:
        return longest
    least = KEPT * distance
    t = 0.0
    for _ in range(ADVANCES):
        advance = 0.9 * (distance - 0.5 * least) / closing
        if t + advance >= longest:
            return longest
        for k in range(4):
            for i in range(3):
                x[k, i] += advance * p[k, i]
        distance = _gap(of_edges, x, weights, gap)
        if distance < least:
            return t
        t += advance
    return t


@inner_kernel
def _leaves(tree, query_tree, query_node, margin, stack, leaves):  # type: ignore[no-untyped-def]
    """Leaves of a tree whose boxes overlap a node's of another, wider by a margin; returns how many."""
    n = 0
    stack[0] = 0
    size = 1
    while size > 0:
        size -= 1
        node = stack[size]
        apart = False
        for d in range(3):
            apart |= query_tree.low[query_node, d] - margin > tree.high[node, d]
            apart |= query_tree.high[query_node, d] + margin < tree.low[node, d]
        if apart:
            continue
        if tree.child[node] < 0:
            leaves[n] = node
            n += 1
        else:
            stack[size] = tree.child[node]
            stack[size + 1] = tree.child[node] + 1
            size += 2
    return n


@kernel
def _visit(first, last, of_edges, searching, queries, cells, nodes, here, there, reach, out, found):  # type: ignore[no-untyped-def]
    """Look at every query and cell that share no point and whose boxes, wider by `reach`, overlap.

    Searching: how many cells lie nearer than `reach` into out (q,), as many as fit into found (q, m).
    Else: the safe share in [0, 1] of each query's way from `here` to `there` into out.
    """
    x, p = np.empty((4, 3)), np.empty((4, 3))
    weights, gap, corners = np.empty(4), np.empty(3), np.empty(4, np.int64)
    stack, leaves = np.empty(DEPTH, np.int64), np.empty(len(cells.tree.child), np.int64)
    for m in range(first, last):
        n = _leaves(cells.tree, queries.tree, nodes[m], reach, stack, leaves)
        for i in range(queries.tree.first[nodes[m]], queries.tree.last[nodes[m]]):
            q = queries.tree.order[i]
            out[q] = 0.0 if searching else 1.0
            for k in range(n):
                for j in range(cells.tree.first[leaves[k]], cells.tree.last[leaves[k]]):
                    c = cells.tree.order[j]
                    if (of_edges and c <= q) or _boxes_apart(queries.boxes, i, reach, cells.boxes, j):
                        continue
                    if _share_a_point(queries.corners, q, cells.corners, c):
                        continue
                    _corners(of_edges, queries.corners, q, cells.corners, c, corners)
                    for a in range(4):
                        for d in range(3):
                            x[a, d] = here[corners[a], d]
                            p[a, d] = there[corners[a], d] - here[corners[a], d]
                    if not searching:
                        out[q] = min(out[q], _first_meeting(of_edges, x, p, out[q], weights, gap))
                    elif _gap(of_edges, x, weights, gap) < reach:
                        if out[q] < found.shape[1]:
                            found[q, np.int64(out[q])] = c
                        out[q] += 1.0


def _swept(corners: Ints, tree: Tree, here: Floats, there: Floats) -> _Cells:
    boxes = np.empty((len(corners), 6))
    _sweep(tree, corners, here, there, boxes)
    return _Cells(corners, tree, boxes)


def _visited(
    skin: Skin, of_edges: bool, here: Floats, there: Floats, *, reach_mm: float, found: Ints
) -> Floats:
    """What `_visit` leaves in `out`, of points and triangles or of edges and edges."""
    if of_edges:
        queries = cells = _swept(skin.edges, skin.edge_tree, here, there)
    else:
        queries = _swept(skin.points, skin.point_tree, here, there)
        cells = _swept(skin.triangles, skin.triangle_tree, here, there)
    out = np.empty(len(queries.corners))
    nodes = np.flatnonzero(queries.tree.child < 0)
    searching = found.shape[1] > 0
    on_threads(
        _visit,
        len(nodes),
        of_edges,
        searching,
        queries,
        cells,
        nodes,
        here,
        there,
        reach_mm,
        out,
        found,
    )
    return out


def longest_step(skin: Skin, here: Floats, there: Floats) -> float:
    """Share in [0, 1] of the straight way from `here` to `there` on which the skin surely never meets itself.

    Parameters
    ----------
    skin : Skin
        Must not touch itself at `here`.
    here, there : (n, 3) float64, mm
    """
    none = np.empty((0, 0), np.int64)
    return min(
        float(_visited(skin, kind, here, there, reach_mm=0.0, found=none).min()) for kind in (False, True)
    )


class Pairs(NamedTuple):
    """Parts of a skin that are near each other.

    Parameters
    ----------
    corners : (k, 4) int64
    weights : (k, 4) float64
    gaps : (k, 3) float64, mm
        ``sum_c weight_c x_c``.
    of_edges : (k,) bool
        True for two edges, False for a point and a triangle.
    """

    corners: Ints
    weights: Floats
    gaps: Floats
    of_edges: NDArray[np.bool_]


def near_pairs(skin: Skin, points: Floats, reach_mm: float) -> Pairs:
    """All pairs of the skin nearer than `reach_mm`, point-triangle pairs first."""
    lone, cell = _near_cells(skin, False, points, reach_mm)
    edge, other = _near_cells(skin, True, points, reach_mm)
    corners = np.concatenate(
        [
            np.concatenate([skin.points[lone, :1], skin.triangles[cell]], axis=1),
            np.concatenate([skin.edges[edge, :2], skin.edges[other, :2]], axis=1),
        ]
    )
    k = len(corners)
    of_edges = np.arange(k) >= len(lone)
    pairs = Pairs(corners, np.empty((k, 4)), np.empty((k, 3)), of_edges)
    _measure(pairs, points, pairs.weights, pairs.gaps)
    return pairs


def _near_cells(skin: Skin, of_edges: bool, points: Floats, reach_mm: float) -> tuple[Ints, Ints]:
    """(query, cell) of every near pair; searched again with more room where there were more than fit."""
    n = len(skin.edges) if of_edges else len(skin.points)
    found = np.empty((n, ROOM), np.int64)
    count = _visited(skin, of_edges, points, points, reach_mm=reach_mm, found=found).astype(np.int64)
    if count.max(initial=0) > ROOM:
        found = np.empty((n, int(count.max())), np.int64)
        _visited(skin, of_edges, points, points, reach_mm=reach_mm, found=found)
    query = np.repeat(np.arange(n), count)
    within = np.arange(len(query)) - np.repeat(np.cumsum(count) - count, count)
    return query, found[query, within]


@kernel
def _measure(pairs, points, weights, gaps):  # type: ignore[no-untyped-def]
    x = np.empty((4, 3))
    for k in range(len(pairs.corners)):
        for c in range(4):
            for d in range(3):
                x[c, d] = points[pairs.corners[k, c], d]
        _gap(pairs.of_edges[k], x, weights[k], gaps[k])


def remeasured(pairs: Pairs, points: Floats, reach_mm: float) -> Pairs:
    """Those of the pairs that are nearer than `reach_mm` where their points are now."""
    weights, gaps = np.empty_like(pairs.weights), np.empty_like(pairs.gaps)
    _measure(pairs, points, weights, gaps)
    keep = np.linalg.norm(gaps, axis=1) < reach_mm
    return Pairs(pairs.corners[keep], weights[keep], gaps[keep], pairs.of_edges[keep])


@kernel
def longest_step_of(pairs, here, there):  # type: ignore[no-untyped-def]
    """As `longest_step`, for these pairs alone."""
    x, p = np.empty((4, 3)), np.empty((4, 3))
    weights, gap = np.empty(4), np.empty(3)
    safe = 1.0
    for k in range(len(pairs.corners)):
        for c in range(4):
            for d in range(3):
                x[c, d] = here[pairs.corners[k, c], d]
                p[c, d] = there[pairs.corners[k, c], d] - x[c, d]
        safe = min(safe, _first_meeting(pairs.of_edges[k], x, p, safe, weights, gap))
    return safe
