"""Orientation signs that are exact.

A determinant is first taken in floating point with a forward bound of its error; where the bound does
not decide, it is taken again without any rounding, as a sum of floating point numbers that do not
overlap ("expansion").  J. R. Shewchuk, Adaptive precision floating-point arithmetic and fast robust
geometric predicates, Discrete & Computational Geometry 18 (1997) 305-363: two-sum and two-product
(theorems 7 and 18), grow-expansion (theorem 10), error bounds A (from memory).

Products of three differences neither overflow nor underflow while every coordinate is 0 or between
``SMALLEST`` and ``LARGEST`` in size; tets with other coordinates are decided by rational arithmetic.
"""

from __future__ import annotations

from collections.abc import Iterable
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel

SMALLEST, LARGEST = 1e-75, 1e75

_EPSILON = 2.0**-53
_BOUND_3D = (7.0 + 56.0 * _EPSILON) * _EPSILON
_BOUND_2D = (3.0 + 16.0 * _EPSILON) * _EPSILON
_SPLITTER = 2.0**27 + 1.0
_PERMUTATIONS = np.array(
    [[0, 1, 2, 1], [1, 2, 0, 1], [2, 0, 1, 1], [0, 2, 1, -1], [2, 1, 0, -1], [1, 0, 2, -1]], np.int64
)


@inner_kernel
def _two_sum(a: float, b: float) -> tuple[float, float]:
    """Rounded sum, and what rounding took away."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@inner_kernel
def _two_product(a: float, b: float) -> tuple[float, float]:
    """Rounded product, and what rounding took away."""
    p = a * b
    c = _SPLITTER * a
    a_high = c - (c - a)
    a_low = a - a_high
    c = _SPLITTER * b
    b_high = c - (c - b)
    b_low = b - b_high
    return p, a_low * b_low - (((p - a_high * b_high) - a_low * b_high) - a_high * b_low)


@inner_kernel
def _grow(expansion: NDArray[np.float64], n: int, b: float) -> int:
    """Add `b` to an expansion of `n` numbers in place; returns its new length (zeros dropped)."""
    q = b
    k = 0
    for i in range(n):
        q, rest = _two_sum(q, expansion[i])
        if rest != 0.0:
            expansion[k] = rest
            k += 1
    if q != 0.0:
        expansion[k] = q
        k += 1
    return k


@inner_kernel
def _sign_of(expansion: NDArray[np.float64], n: int) -> int:
    """Sign of an expansion: that of its last, largest number."""
    if n == 0:
        return 0
    return 1 if expansion[n - 1] > 0.0 else -1


@inner_kernel
def _differences(points: NDArray[np.float64], base: int, ends: tuple[int, int, int]) -> NDArray[np.float64]:
    """(3, 3, 2) exact differences ``points[end] - points[base]`` as two numbers each."""
    d = np.empty((3, 3, 2))
    for r in range(3):
        for c in range(3):
            d[r, c, 0], d[r, c, 1] = _two_sum(points[ends[r], c], -points[base, c])
    return d


@inner_kernel
def _exact_sign_3d(points: NDArray[np.float64], i: int, j: int, k: int, m: int) -> int:
    """Sign of det[pj - pi, pk - pi, pm - pi], without rounding."""
    d = _differences(points, i, (j, k, m))
    expansion = np.empty(200)
    n = np.int64(0)
    for p in range(6):
        ca, cb, cc = _PERMUTATIONS[p, 0], _PERMUTATIONS[p, 1], _PERMUTATIONS[p, 2]
        for part in range(8):
            x = d[0, ca, part & 1]
            y = d[1, cb, (part >> 1) & 1]
            z = d[2, cc, part >> 2] * _PERMUTATIONS[p, 3]
            if x != 0.0 and y != 0.0 and z != 0.0:
                high, low = _two_product(x, y)
                high_z, high_rest = _two_product(high, z)
                low_z, low_rest = _two_product(low, z)
                n = _grow(expansion, n, low_rest)
                n = _grow(expansion, n, low_z)
                n = _grow(expansion, n, high_rest)
                n = _grow(expansion, n, high_z)
    return _sign_of(expansion, n)


@inner_kernel
def orient_3d(points: NDArray[np.float64], i: int, j: int, k: int, m: int) -> int:
    """Sign of the tet ijkm: +1 when ijk runs counter-clockwise seen from m, 0 when flat.

    That is the sign of ``det[pj - pi, pk - pi, pm - pi]``.

    Exact for coordinates that are 0 or between SMALLEST and LARGEST in size.
    """
    ax, ay, az = points[j, 0] - points[i, 0], points[j, 1] - points[i, 1], points[j, 2] - points[i, 2]
    bx, by, bz = points[k, 0] - points[i, 0], points[k, 1] - points[i, 1], points[k, 2] - points[i, 2]
    cx, cy, cz = points[m, 0] - points[i, 0], points[m, 1] - points[i, 1], points[m, 2] - points[i, 2]
    bc, cb, ca, ac, ab, ba = bx * cy, by * cx, cx * ay, cy * ax, ax * by, ay * bx
    det = az * (bc - cb) + bz * (ca - ac) + cz * (ab - ba)
    size = (
        (abs(bc) + abs(cb)) * abs(az) + (abs(ca) + abs(ac)) * abs(bz) + (abs(ab) + abs(ba)) * abs(cz)
    ) * _BOUND_3D
    if det > size:
        return 1
    if det < -size:
        return -1
    if size == 0.0:  # every product is exactly 0: in one plane along an axis
        return 0
    return _exact_sign_3d(points, i, j, k, m)


@inner_kernel
def orient_2d(points: NDArray[np.float64], axis: int, i: int, j: int, k: int) -> int:
    """Sign of the triangle ijk seen along `axis`: +1 counter-clockwise in the two that follow it.

    Exact for coordinates that are 0 or between SMALLEST and LARGEST in size.
    """
    u, v = (axis + 1) % 3, (axis + 2) % 3
    left = (points[j, u] - points[i, u]) * (points[k, v] - points[i, v])
    right = (points[j, v] - points[i, v]) * (points[k, u] - points[i, u])
    size = (abs(left) + abs(right)) * _BOUND_2D
    if left - right > size:
        return 1
    if left - right < -size:
        return -1
    if size == 0.0:
        return 0
    d = _differences(points, i, (j, k, k))
    expansion = np.empty(20)
    n = np.int64(0)
    for part in range(4):
        a, b = part & 1, part >> 1
        high, low = _two_product(d[0, u, a], d[1, v, b])
        n = _grow(expansion, _grow(expansion, n, low), high)
        high, low = _two_product(d[0, v, a], -d[1, u, b])
        n = _grow(expansion, _grow(expansion, n, low), high)
    return _sign_of(expansion, n)


@kernel
def _signs(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.int8]:
    signs = np.empty(len(tets), np.int8)
    for t in range(len(tets)):
        signs[t] = orient_3d(points, tets[t, 0], tets[t, 1], tets[t, 2], tets[t, 3])
    return signs


def in_exact_range(points: NDArray[np.float64]) -> NDArray[np.bool_]:
    """(n,) True where every coordinate is 0 or between SMALLEST and LARGEST in size."""
    size = np.abs(points)
    return np.asarray(((size == 0) | ((size >= SMALLEST) & (size <= LARGEST))).all(axis=1))


def rational_sign(corners: Iterable[Iterable[float | Fraction]]) -> int:
    """Sign of one tet by rational arithmetic, for finite coordinates of any size.

    Parameters
    ----------
    corners : (4, 3) float64 or Fraction
    """
    p = [[Fraction(c) for c in corner] for corner in corners]
    a, b, c = ([q[k] - p[0][k] for k in range(3)] for q in p[1:])
    det = (
        a[0] * (b[1] * c[2] - b[2] * c[1])
        - a[1] * (b[0] * c[2] - b[2] * c[0])
        + a[2] * (b[0] * c[1] - b[1] * c[0])
    )
    return (det > 0) - (det < 0)


def orientation_signs(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.int8]:
    """Exact orientation of tets.

    Parameters
    ----------
    points : (n, 3) float64, finite
    tets : (m, 4) int64

    Returns
    -------
    (m,) int8
        +1 positive, 0 exactly flat, -1 inverted.
    """
    points = np.array(points, np.float64, order="C")
    tets = np.array(tets, np.int64, order="C")
    signs = _signs(points, tets)
    outside = ~in_exact_range(points)
    if outside.any():
        for t in np.flatnonzero(outside[tets].any(axis=1)):
            signs[t] = rational_sign(points[tets[t]])
    return np.asarray(signs)
