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
    edge_tree, triangle_tree : Tree
    """

    points: Ints
    edges: Ints
    triangles: Ints
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
    lone = np.ascontiguousarray(np.repeat(used[:, None], 3, axis=1))
    edges, triangles = np.ascontiguousarray(edges), np.ascontiguousarray(triangles)
    return Skin(lone, edges, triangles, build_tree(points, edges), build_tree(points, triangles))


@kernel
def _sweep(tree, cells, here, there):  # type: ignore[no-untyped-def]
    """Boxes around cells on their straight way from `here` to `there`, in place."""
    for node in range(len(tree.child) - 1, -1, -1):
        c = tree.child[node]
        for d in range(3):
            low, high = np.inf, -np.inf
            if c >= 0:
                low = min(tree.low[c, d], tree.low[c + 1, d])
                high = max(tree.high[c, d], tree.high[c + 1, d])
            else:
                for i in range(tree.first[node], tree.last[node]):
                    for k in range(3):
                        p = cells[tree.order[i], k]
                        low = min(low, here[p, d], there[p, d])
                        high = max(high, here[p, d], there[p, d])
            tree.low[node, d] = low
            tree.high[node, d] = high


@inner_kernel
def _box(cell, here, there, margin, low, high):  # type: ignore[no-untyped-def]
    for d in range(3):
        low[d], high[d] = np.inf, -np.inf
        for k in range(3):
            low[d] = min(low[d], here[cell[k], d], there[cell[k], d])
            high[d] = max(high[d], here[cell[k], d], there[cell[k], d])
        low[d] -= margin
        high[d] += margin


@inner_kernel
def _apart(low, high, low2, high2):  # type: ignore[no-untyped-def]
    x = low[0] > high2[0] or high[0] < low2[0]
    y = low[1] > high2[1] or high[1] < low2[1]
    return x or y or low[2] > high2[2] or high[2] < low2[2]


@inner_kernel
def _share_a_point(a, b):  # type: ignore[no-untyped-def]
    for i in range(3):
        for j in range(3):
            if a[i] == b[j]:
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
        u, v, w, _ = on_triangle(x[0, 0], x[0, 1], x[0, 2], x, np.int64(1), np.int64(2), np.int64(3))
        weights[0], weights[1], weights[2], weights[3] = 1.0, -u, -v, -w
    squared = 0.0
    for i in range(3):
        gap[i] = 0.0
        for k in range(4):
            gap[i] += weights[k] * x[k, i]
        squared += gap[i] * gap[i]
    return sqrt(squared)


@inner_kernel
def _corners(of_edges, query, cell, corners):  # type: ignore[no-untyped-def]
    if of_edges:
        corners[0], corners[1], corners[2], corners[3] = query[0], query[1], cell[0], cell[1]
    else:
        corners[0], corners[1], corners[2], corners[3] = query[0], cell[0], cell[1], cell[2]


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
def _leaves(tree, low, high, stack, leaves):  # type: ignore[no-untyped-def]
    """Leaves of a tree whose boxes overlap a box, into leaves; returns how many."""
    n = 0
    stack[0] = 0
    size = 1
    while size > 0:
        size -= 1
        node = stack[size]
        if _apart(low, high, tree.low[node], tree.high[node]):
            continue
        if tree.child[node] < 0:
            leaves[n] = node
            n += 1
        else:
            stack[size] = tree.child[node]
            stack[size + 1] = tree.child[node] + 1
            size += 2
    return n


@inner_kernel
def _worth_a_look(of_edges, cells, queries, q, c, here, there, low, high, low2, high2):  # type: ignore[no-untyped-def]
    """True when query q and cell c have no point in common, boxes that overlap, and are not met twice."""
    if (of_edges and c <= q) or _share_a_point(queries[q], cells[c]):
        return False
    _box(cells[c], here, there, 0.0, low2, high2)
    return not _apart(low, high, low2, high2)


@kernel
def _longest_steps(first, last, of_edges, tree, cells, queries, here, there, out):  # type: ignore[no-untyped-def]
    """Safe share in [0, 1] of the way from here to there, query by query."""
    low, high, low2, high2 = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    x, p = np.empty((4, 3)), np.empty((4, 3))
    weights, gap, corners = np.empty(4), np.empty(3), np.empty(4, np.int64)
    stack, leaves = np.empty(DEPTH, np.int64), np.empty(len(tree.child), np.int64)
    for q in range(first, last):
        safe = 1.0
        _box(queries[q], here, there, 0.0, low, high)
        for n in range(_leaves(tree, low, high, stack, leaves)):
            for i in range(tree.first[leaves[n]], tree.last[leaves[n]]):
                c = tree.order[i]
                if _worth_a_look(of_edges, cells, queries, q, c, here, there, low, high, low2, high2):
                    _corners(of_edges, queries[q], cells[c], corners)
                    for k in range(4):
                        for d in range(3):
                            x[k, d] = here[corners[k], d]
                            p[k, d] = there[corners[k], d] - here[corners[k], d]
                    safe = min(safe, _first_meeting(of_edges, x, p, safe, weights, gap))
        out[q] = safe


def longest_step(skin: Skin, here: Floats, there: Floats) -> float:
    """Share in [0, 1] of the straight way from `here` to `there` on which the skin surely never meets itself.

    Parameters
    ----------
    skin : Skin
        Must not touch itself at `here`.
    here, there : (n, 3) float64, mm
    """
    by_point, by_edge = np.empty(len(skin.points)), np.empty(len(skin.edges))
    _sweep(skin.triangle_tree, skin.triangles, here, there)
    on_threads(
        _longest_steps,
        len(skin.points),
        False,
        skin.triangle_tree,
        skin.triangles,
        skin.points,
        here,
        there,
        by_point,
    )
    _sweep(skin.edge_tree, skin.edges, here, there)
    on_threads(
        _longest_steps, len(skin.edges), True, skin.edge_tree, skin.edges, skin.edges, here, there, by_edge
    )
    return float(min(by_point.min(), by_edge.min()))


@kernel
def _near(first, last, of_edges, tree, cells, queries, points, reach, count, found):  # type: ignore[no-untyped-def]
    """Cells nearer than `reach` to each query: how many into count (q,), as many as fit into found (q, m)."""
    low, high, low2, high2 = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    x, corners = np.empty((4, 3)), np.empty(4, np.int64)
    weights, gap = np.empty(4), np.empty(3)
    stack, leaves = np.empty(DEPTH, np.int64), np.empty(len(tree.child), np.int64)
    for q in range(first, last):
        count[q] = 0
        _box(queries[q], points, points, reach, low, high)
        for n in range(_leaves(tree, low, high, stack, leaves)):
            for i in range(tree.first[leaves[n]], tree.last[leaves[n]]):
                c = tree.order[i]
                if _worth_a_look(of_edges, cells, queries, q, c, points, points, low, high, low2, high2):
                    _corners(of_edges, queries[q], cells[c], corners)
                    for k in range(4):
                        for d in range(3):
                            x[k, d] = points[corners[k], d]
                    if _gap(of_edges, x, weights, gap) < reach:
                        if count[q] < found.shape[1]:
                            found[q, count[q]] = c
                        count[q] += 1


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
    lone, cell = _near_cells(False, skin.triangle_tree, skin.triangles, skin.points, points, reach_mm)
    edge, other = _near_cells(True, skin.edge_tree, skin.edges, skin.edges, points, reach_mm)
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


def _near_cells(
    of_edges: bool, tree: Tree, cells: Ints, queries: Ints, points: Floats, reach_mm: float
) -> tuple[Ints, Ints]:
    """(query, cell) of every near pair; searched again with more room where there were more than fit."""
    _sweep(tree, cells, points, points)
    count = np.empty(len(queries), np.int64)
    found = np.empty((len(queries), ROOM), np.int64)
    on_threads(_near, len(queries), of_edges, tree, cells, queries, points, reach_mm, count, found)
    if count.max(initial=0) > ROOM:
        found = np.empty((len(queries), int(count.max())), np.int64)
        on_threads(_near, len(queries), of_edges, tree, cells, queries, points, reach_mm, count, found)
    query = np.repeat(np.arange(len(queries)), count)
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
