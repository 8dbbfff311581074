"""Symmetrised distortion of tets: value, first and second derivatives in the image points.

The density W of an energy is integrated over both bodies, ``W_S(F) = (W(F) + det F W(F^-1)) / 2``, which
makes the total independent of the order of the two bodies.  Derivatives of isotropic densities follow Smith,
de Goes & Kim, ACM TOG 38(1), 2019: with F = U diag(s) V^T and g = dW/ds the second derivative has the 3x3
block d2W/ds2, three flip values (g_i - g_j)/(s_i - s_j) and three twist values (g_i + g_j)/(s_i + s_j).
Each part is clamped at zero: the nearest convex model.
"""

from __future__ import annotations

from math import sqrt

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.energies import density
from volmap.kernels.threads import on_threads

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SWEEPS = 30  # Jacobi sweeps at most; four are enough for any F met so far
ROUNDING = 1e-30  # squared cosine of columns that are left alone
LAST_SWEEP = 1e-16  # a sweep that met no larger squared cosine was the last: it leaves the square of that
FLAT = 1e-12  # share of its volume in the source that a tet must keep to count as positive


@inner_kernel
def rotate_to_stretches(a, v):  # type: ignore[no-untyped-def]
    """One-sided Jacobi: turn the columns of `a` (3, 3) until orthogonal, in place; `v` collects the turns.

    Afterwards ``a = U diag(s)`` and ``a_before = a v^T`` (Hestenes, J. SIAM 6, 1958).
    """
    for i in range(3):
        for j in range(3):
            v[i, j] = 1.0 if i == j else 0.0
    for _ in range(SWEEPS):
        largest = 0.0
        for p in range(2):
            for q in range(p + 1, 3):
                alpha = a[0, p] * a[0, p] + a[1, p] * a[1, p] + a[2, p] * a[2, p]
                beta = a[0, q] * a[0, q] + a[1, q] * a[1, q] + a[2, q] * a[2, q]
                gamma = a[0, p] * a[0, q] + a[1, p] * a[1, q] + a[2, p] * a[2, q]
                if gamma * gamma <= ROUNDING * alpha * beta:
                    continue
                largest = max(largest, gamma * gamma / (alpha * beta))
                half = 0.5 * (beta - alpha)
                t = gamma / (abs(half) + sqrt(half * half + gamma * gamma))
                if half < 0.0:
                    t = -t
                c = 1.0 / sqrt(1.0 + t * t)
                s = c * t
                for i in range(3):
                    x, y = a[i, p], a[i, q]
                    a[i, p], a[i, q] = c * x - s * y, s * x + c * y
                    x, y = v[i, p], v[i, q]
                    v[i, p], v[i, q] = c * x - s * y, s * x + c * y
        if largest < LAST_SWEEP:
            break


@inner_kernel
def symmetrised(code, s, gradient, hessian, t, inverse_gradient, inverse_hessian):  # type: ignore[no-untyped-def]
    """W_S and its derivatives in s, by the chain rule with t = 1/s; the last three arrays are work space."""
    jacobian = s[0] * s[1] * s[2]
    for i in range(3):
        t[i] = 1.0 / s[i]
    there = density(code, s, gradient, hessian)
    back = density(code, t, inverse_gradient, inverse_hessian)
    for i in range(3):
        di = t[i] * t[i] * inverse_gradient[i]
        for j in range(3):
            dj = t[j] * t[j] * inverse_gradient[j]
            second = t[i] * t[i] * t[j] * t[j] * inverse_hessian[i, j] - t[i] * dj - t[j] * di
            second += 2.0 * t[i] * di if i == j else t[i] * t[j] * back
            hessian[i, j] = 0.5 * (hessian[i, j] + jacobian * second)
    for i in range(3):
        first = t[i] * back - t[i] * t[i] * inverse_gradient[i]
        gradient[i] = 0.5 * (gradient[i] + jacobian * first)
    return 0.5 * (there + jacobian * back)


@inner_kernel
def clamp_symmetric(h, a, v):  # type: ignore[no-untyped-def]
    """Replace a symmetric 3x3 matrix by its positive semidefinite part, in place; `a`, `v` are work space."""
    minor = h[0, 0] * h[1, 1] - h[0, 1] * h[0, 1]
    determinant = (
        h[2, 2] * minor
        - h[1, 2] * (h[0, 0] * h[1, 2] - h[0, 1] * h[0, 2])
        + h[0, 2] * (h[0, 1] * h[1, 2] - h[1, 1] * h[0, 2])
    )
    if h[0, 0] > 0.0 and minor > 0.0 and determinant > 0.0:
        return
    # One-sided Jacobi on h + shift I, which is positive: its left and right vectors agree.
    shift = 0.0
    for i in range(3):
        shift = max(shift, abs(h[i, 0]) + abs(h[i, 1]) + abs(h[i, 2]))
    for i in range(3):
        for j in range(3):
            a[i, j] = h[i, j] + (2.0 * shift if i == j else 0.0)
    rotate_to_stretches(a, v)
    for i in range(3):
        for j in range(3):
            h[i, j] = 0.0
    for k in range(3):
        value = sqrt(a[0, k] ** 2 + a[1, k] ** 2 + a[2, k] ** 2) - 2.0 * shift
        if value > 0.0:
            for i in range(3):
                for j in range(3):
                    h[i, j] += value * v[i, k] * v[j, k]


@inner_kernel
def _gradient_of(points, tets, shape_gradients, t, f):  # type: ignore[no-untyped-def]
    """F of tet t into f (3, 3); returns its determinant."""
    for i in range(3):
        for j in range(3):
            total = 0.0
            for c in range(4):
                total += points[tets[t, c], i] * shape_gradients[t, c, j]
            f[i, j] = total
    return (
        f[0, 0] * (f[1, 1] * f[2, 2] - f[1, 2] * f[2, 1])
        - f[0, 1] * (f[1, 0] * f[2, 2] - f[1, 2] * f[2, 0])
        + f[0, 2] * (f[1, 0] * f[2, 1] - f[1, 1] * f[2, 0])
    )


@inner_kernel
def _stretches(f, v, s):  # type: ignore[no-untyped-def]
    """Turn f into U diag(s), in place; v and s written."""
    rotate_to_stretches(f, v)
    for k in range(3):
        s[k] = sqrt(f[0, k] ** 2 + f[1, k] ** 2 + f[2, k] ** 2)


@inner_kernel
def _forces(weight, shape_gradient, u, v, g, turned, force):  # type: ignore[no-untyped-def]
    """First derivative in the corners into force (4, 3); shape gradients in the frame of v into turned."""
    for c in range(4):
        for k in range(3):
            turned[c, k] = (
                v[0, k] * shape_gradient[c, 0]
                + v[1, k] * shape_gradient[c, 1]
                + v[2, k] * shape_gradient[c, 2]
            )
        for i in range(3):
            force[c, i] = weight * (
                u[i, 0] * g[0] * turned[c, 0] + u[i, 1] * g[1] * turned[c, 1] + u[i, 2] * g[2] * turned[c, 2]
            )


@inner_kernel
def _parts(s, g, h, p, q, clamp, a, v):  # type: ignore[no-untyped-def]
    """Half sums and half differences of flips and twists into p, q (3, 3); h made positive."""
    for i in range(3):
        for j in range(i + 1, 3):
            gap = s[i] - s[j]
            near = abs(gap) < 1e-5 * (s[i] + s[j])
            flip = 0.5 * (h[i, i] + h[j, j]) - h[i, j] if near else (g[i] - g[j]) / gap
            twist = (g[i] + g[j]) / (s[i] + s[j])
            if clamp:
                flip = max(flip, 0.0)
                twist = max(twist, 0.0)
            p[i, j] = p[j, i] = 0.5 * (flip + twist)
            q[i, j] = q[j, i] = 0.5 * (flip - twist)
    if clamp:
        clamp_symmetric(h, a, v)


@inner_kernel
def _block(weight, h, p, q, u, ga, gb, k, r, block):  # type: ignore[no-untyped-def]
    """weight U Khat U^T of two points whose rotated shape gradients are ga, gb, into block (3, 3)."""
    for i in range(3):
        total = h[i, i] * ga[i] * gb[i]
        for j in range(3):
            if j != i:
                total += p[i, j] * ga[j] * gb[j]
                k[i, j] = h[i, j] * ga[i] * gb[j] + q[i, j] * ga[j] * gb[i]
        k[i, i] = total
    for i in range(3):
        for j in range(3):
            r[i, j] = u[i, 0] * k[0, j] + u[i, 1] * k[1, j] + u[i, 2] * k[2, j]
    for i in range(3):
        for j in range(3):
            block[i, j] = weight * (r[i, 0] * u[j, 0] + r[i, 1] * u[j, 1] + r[i, 2] * u[j, 2])


def energies(code: int, points: Floats, tets: Ints, shape_gradients: Floats, out: Floats) -> float:
    """W_S of every tet into out (m,), infinity where a tet is not positive; returns the smallest det F.

    Parameters
    ----------
    code : int
        See `energies.ENERGIES`.
    points : (n, 3) float64
        Image points, mm.
    tets : (m, 4) int64
    shape_gradients : (m, 4, 3) float64
        Of the source mesh, 1/mm.
    """
    ratios, forces, blocks = np.empty(len(tets)), np.empty((0, 4, 3)), np.empty((0, 6, 3, 3), np.float32)
    on_threads(_distort, len(tets), code, points, tets, shape_gradients, ratios, False, out, forces, blocks)
    return float(ratios.min(initial=np.inf))


def derivatives(
    code: int,
    points: Floats,
    tets: Ints,
    shape_gradients: Floats,
    weights: Floats,
    clamp: bool,
    out: Floats,
    forces: Floats,
    blocks: NDArray[np.float32],
) -> None:
    """Values and weighted derivatives of W_S, tet by tet.

    Parameters
    ----------
    code, points, tets, shape_gradients
        As for `energies`.
    weights : (m,) float64
        Factor of each tet in the objective (v_t / V).
    clamp : bool
        Make each tet's second derivative positive semidefinite.
    out : (m,) float64
        W_S, not weighted; infinity where a tet is not positive.
    forces : (m, 4, 3) float64
        Weighted first derivative in each corner.
    blocks : (m, 6, 3, 3) float32
        Weighted second derivative for the corner pairs of `tets.EDGES`.  ``K_ba = K_ab^T`` and
        the rows of K sum to zero, so six blocks are the whole matrix.
    """
    on_threads(_distort, len(tets), code, points, tets, shape_gradients, weights, clamp, out, forces, blocks)


@kernel
def _distort(first, last, code, points, tets, shape_gradients, weights, clamp, out, forces, blocks):  # type: ignore[no-untyped-def]
    """Both of the above, so that the densities are compiled once; without `blocks`, det F into `weights`."""
    f, v, s = np.empty((3, 3)), np.empty((3, 3)), np.empty(3)
    g, h, w = np.empty(3), np.empty((3, 3)), np.empty(3)
    g2, h2, u = np.empty(3), np.empty((3, 3)), np.empty((3, 3))
    p, q, turned = np.empty((3, 3)), np.empty((3, 3)), np.empty((4, 3))
    values_only = len(blocks) == 0
    for t in range(first, last):
        determinant = _gradient_of(points, tets, shape_gradients, t, f)
        if values_only:
            weights[t] = determinant
        if determinant <= FLAT:
            out[t] = np.inf
            if not values_only:
                _no_derivatives(forces[t], blocks[t])
            continue
        _stretches(f, v, s)
        for k in range(3):
            for i in range(3):
                u[i, k] = f[i, k] / s[k]
        out[t] = symmetrised(code, s, g, h, w, g2, h2)
        if values_only:
            continue
        _forces(weights[t], shape_gradients[t], u, v, g, turned, forces[t])
        _parts(s, g, h, p, q, clamp, f, h2)
        e = 0
        for a in range(3):
            for b in range(a + 1, 4):
                _block(weights[t], h, p, q, u, turned[a], turned[b], f, h2, blocks[t, e])
                e += 1


@inner_kernel
def _no_derivatives(force, block):  # type: ignore[no-untyped-def]
    for a in range(4):
        for i in range(3):
            force[a, i] = 0.0
    for e in range(6):
        for i in range(3):
            for j in range(3):
                block[e, i, j] = 0.0
