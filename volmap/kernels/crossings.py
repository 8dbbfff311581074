"""Triangles that meet where they should not, decided with exact signs.

Two triangles cross when they have a point in common beyond the corners they share by number: touching
counts, lying on each other counts, a flat hinge does not.  Every decision is a sign of
:mod:`volmap.kernels.predicates`; no length is compared with a tolerance.

Candidates come from a uniform grid: a pair is looked at in the one cell that holds the lower corner of
the overlap of the two boxes, so each pair is seen once and always in the same order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.predicates import in_exact_range, orient_2d, orient_3d

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@inner_kernel
def _segments_meet_2d(points: Floats, axis: int, a: int, b: int, c: int, d: int) -> bool:
    """True when the closed segments ab and cd meet, seen along `axis`."""
    sc, sd = orient_2d(points, axis, a, b, c), orient_2d(points, axis, a, b, d)
    if sc * sd > 0:
        return False
    sa, sb = orient_2d(points, axis, c, d, a), orient_2d(points, axis, c, d, b)
    if sa * sb > 0:
        return False
    for u in ((axis + 1) % 3, (axis + 2) % 3):
        if max(points[a, u], points[b, u]) < min(points[c, u], points[d, u]):
            return False
        if max(points[c, u], points[d, u]) < min(points[a, u], points[b, u]):
            return False
    return True


@inner_kernel
def _inside_2d(points: Floats, axis: int, tri: tuple[int, int, int], p: int) -> bool:
    """True when p lies in the closed triangle, seen along `axis` (in which it is not flat)."""
    s0 = orient_2d(points, axis, tri[0], tri[1], p)
    s1 = orient_2d(points, axis, tri[1], tri[2], p)
    s2 = orient_2d(points, axis, tri[2], tri[0], p)
    return min(s0, s1, s2) >= 0 or max(s0, s1, s2) <= 0


@inner_kernel
def _axis_of(points: Floats, tri: tuple[int, int, int]) -> int:
    """An axis along which the triangle is not flat; -1 when it has no area at all."""
    for axis in range(3):
        if orient_2d(points, axis, tri[0], tri[1], tri[2]) != 0:
            return axis
    return -1


@inner_kernel
def _segment_meets_segment(points: Floats, p: int, q: int, a: int, b: int) -> bool:
    """True when two closed segments in space meet: in one plane, and meeting along all three axes."""
    if orient_3d(points, p, q, a, b) != 0:
        return False
    for axis in range(3):  # noqa: SIM110  (compiled code has no all())
        if not _segments_meet_2d(points, axis, p, q, a, b):
            return False
    return True


@inner_kernel
def _segment_meets_triangle(points: Floats, p: int, q: int, tri: tuple[int, int, int]) -> bool:
    """True when the closed segment pq meets the closed triangle."""
    a, b, c = tri
    sp, sq = orient_3d(points, a, b, c, p), orient_3d(points, a, b, c, q)
    if sp * sq > 0:
        return False
    if sp != 0 or sq != 0:
        s0, s1 = orient_3d(points, p, q, a, b), orient_3d(points, p, q, b, c)
        if s0 * s1 < 0:
            return False
        s2 = orient_3d(points, p, q, c, a)
        return min(s0, s1, s2) >= 0 or max(s0, s1, s2) <= 0
    axis = _axis_of(points, tri)
    if axis >= 0 and (_inside_2d(points, axis, tri, p) or _inside_2d(points, axis, tri, q)):
        return True
    return (
        _segment_meets_segment(points, p, q, a, b)
        or _segment_meets_segment(points, p, q, b, c)
        or _segment_meets_segment(points, p, q, c, a)
    )


@inner_kernel
def _apart(points: Floats, s: tuple[int, int, int], t: tuple[int, int, int]) -> bool:
    """True when the plane of `s` has all of `t` strictly on one side."""
    s0 = orient_3d(points, s[0], s[1], s[2], t[0])
    if s0 == 0 or orient_3d(points, s[0], s[1], s[2], t[1]) != s0:
        return False
    return orient_3d(points, s[0], s[1], s[2], t[2]) == s0


@inner_kernel
def _coplanar(points: Floats, s: tuple[int, int, int], t: tuple[int, int, int]) -> bool:
    """True when all of `t` lies in the plane of `s`."""
    for c in range(3):  # noqa: SIM110
        if orient_3d(points, s[0], s[1], s[2], t[c]) != 0:
            return False
    return True


@inner_kernel
def _beside(points: Floats, axis: int, s: tuple[int, int, int], t: tuple[int, int, int]) -> bool:
    """True when an edge of `s` has all of `t` strictly on its outer side, seen along `axis`."""
    inner = orient_2d(points, axis, s[0], s[1], s[2])
    for e in range(3):
        a, b = s[e], s[(e + 1) % 3]
        outer = -inner
        if (
            orient_2d(points, axis, a, b, t[0]) == outer
            and orient_2d(points, axis, a, b, t[1]) == outer
            and orient_2d(points, axis, a, b, t[2]) == outer
        ):
            return True
    return False


@inner_kernel
def _free_pair_crosses(points: Floats, s: tuple[int, int, int], t: tuple[int, int, int]) -> bool:
    """Two triangles without a common corner."""
    if _apart(points, s, t) or _apart(points, t, s):
        return False
    axis = _axis_of(points, s)
    if axis >= 0 and _coplanar(points, s, t) and _axis_of(points, t) >= 0:
        return not (_beside(points, axis, s, t) or _beside(points, axis, t, s))
    for e in range(3):
        f = (e + 1) % 3
        if _segment_meets_triangle(points, s[e], s[f], t) or _segment_meets_triangle(points, t[e], t[f], s):
            return True
    return False


@inner_kernel
def _corner_pair_crosses(points: Floats, s: tuple[int, int, int], t: tuple[int, int, int]) -> bool:
    """Two triangles whose first corner is common: anything more they share reaches an opposite edge."""
    return _segment_meets_triangle(points, s[1], s[2], t) or _segment_meets_triangle(points, t[1], t[2], s)


@inner_kernel
def _hinge_crosses(points: Floats, u: int, v: int, a: int, b: int) -> bool:
    """Two triangles uva and uvb: only when they are folded flat onto each other."""
    if orient_3d(points, u, v, a, b) != 0:
        return False
    for axis in range(3):
        side = orient_2d(points, axis, u, v, a)
        if side != 0:
            return side == orient_2d(points, axis, u, v, b)
    return False


@inner_kernel
def _pair_crosses(points: Floats, s: Ints, t: Ints) -> bool:
    """True when the triangles have a point in common beyond the corners they share by number."""
    shared, last_s, last_t, sum_s, sum_t = 0, 0, 0, 0, 0
    for i in range(3):
        for j in range(3):
            if s[i] == t[j]:
                shared, last_s, last_t, sum_s, sum_t = shared + 1, i, j, sum_s + i, sum_t + j
    if shared == 0:
        return _free_pair_crosses(points, (s[0], s[1], s[2]), (t[0], t[1], t[2]))
    if shared == 1:
        return _corner_pair_crosses(
            points,
            (s[last_s], s[(last_s + 1) % 3], s[(last_s + 2) % 3]),
            (t[last_t], t[(last_t + 1) % 3], t[(last_t + 2) % 3]),
        )
    if shared == 2:
        a = 3 - sum_s
        return _hinge_crosses(points, s[(a + 1) % 3], s[(a + 2) % 3], s[a], t[3 - sum_t])
    return True


@inner_kernel
def _fill_cells(first: Ints, last: Ints, shape: Ints) -> tuple[Ints, Ints]:
    """Which triangles reach each cell, as a compressed list (ascending in each cell)."""
    start = np.zeros(shape[0] * shape[1] * shape[2] + 1, np.int64)
    for fill in range(2):
        if fill == 1:
            for c in range(len(start) - 1):
                start[c + 1] += start[c]
            held = np.empty(start[-1], np.int64)
        for t in range(len(first) - 1, -1, -1):
            for i in range(first[t, 0], last[t, 0] + 1):
                for j in range(first[t, 1], last[t, 1] + 1):
                    for k in range(first[t, 2], last[t, 2] + 1):
                        cell = (i * shape[1] + j) * shape[2] + k
                        if fill == 0:
                            start[cell] += 1
                        else:
                            start[cell] -= 1
                            held[start[cell]] = t
    return start, held


@inner_kernel
def _meets_first_here(
    low: Floats, high: Floats, first: Ints, here: tuple[int, int, int], s: int, t: int
) -> bool:
    """True when two boxes overlap and the lower corner of the overlap lies in the cell `here`."""
    for c in range(3):
        if low[s, c] > high[t, c] or low[t, c] > high[s, c]:
            return False
        if max(first[s, c], first[t, c]) != here[c]:
            return False
    return True


@kernel
def _crossing_pairs(
    points: Floats, triangles: Ints, low: Floats, high: Floats, first: Ints, last: Ints
) -> Ints:
    """All pairs that cross, cell by cell; `first` and `last` are the cells of the triangles' boxes."""
    shape = np.ones(3, np.int64)
    for t in range(len(last)):
        for c in range(3):
            shape[c] = max(shape[c], last[t, c] + 1)
    start, held = _fill_cells(first, last, shape)
    pairs, n = np.empty((64, 2), np.int64), 0
    for cell in range(len(start) - 1):
        here = (cell // (shape[1] * shape[2]), cell // shape[2] % shape[1], cell % shape[2])
        for x in range(start[cell], start[cell + 1]):
            for y in range(x + 1, start[cell + 1]):
                s, t = held[x], held[y]
                if not _meets_first_here(low, high, first, here, s, t):
                    continue
                if _pair_crosses(points, triangles[s], triangles[t]):
                    if n == len(pairs):
                        longer = np.empty((2 * n, 2), np.int64)
                        for i in range(n):
                            longer[i, 0], longer[i, 1] = pairs[i, 0], pairs[i, 1]
                        pairs = longer
                    pairs[n, 0], pairs[n, 1] = s, t
                    n += 1
    return pairs[:n]


def _cells_of(low: Floats, high: Floats) -> tuple[Ints, Ints]:
    """(m, 3) first and last cell of each box, in cells about as large as the mean box, two a box at most."""
    origin, extent = low.min(axis=0), high.max(axis=0) - low.min(axis=0)
    edge = max(float((high - low).mean()), float(extent.max()) / 1024, 1e-30)
    while np.ceil(extent / edge + 1).prod() > max(8, 2 * len(low)):
        edge *= 1.25
    return ((low - origin) / edge).astype(np.int64), ((high - origin) / edge).astype(np.int64)


def triangle_crossings(points: Floats, triangles: Ints) -> Ints:
    """Pairs of triangles that cross, exactly.

    Parameters
    ----------
    points : (n, 3) float64, finite
        Used coordinates 0 or between 1e-75 and 1e75 in size.
    triangles : (m, 3) int64
        Corners are compared by number: two points at one place are not a shared corner.

    Returns
    -------
    (k, 2) int64
        Pairs of rows of `triangles`, smaller first, sorted.

    Raises
    ------
    ValueError
        A coordinate so small or large that its products could not be exact.
    """
    points = np.array(points, np.float64, order="C")
    triangles = np.array(triangles, np.int64, order="C")
    if not len(triangles):
        return np.empty((0, 2), np.int64)
    if not in_exact_range(points[np.unique(triangles)]).all():
        raise ValueError("a coordinate is not 0 and not between 1e-75 and 1e75: crossings cannot be exact")
    corners = points[triangles]
    low, high = corners.min(axis=1), corners.max(axis=1)
    pairs = _crossing_pairs(points, triangles, low, high, *_cells_of(low, high))
    order = np.lexsort((pairs[:, 1], pairs[:, 0]))
    found: Ints = pairs[order]
    return found
