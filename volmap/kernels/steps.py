"""How far points may move along a direction before a tet loses its volume."""

from __future__ import annotations

from math import sqrt

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads


@inner_kernel
def _value(a, b, c, t):  # type: ignore[no-untyped-def]
    return 1.0 + t * (a + t * (b + t * c))


@inner_kernel
def first_root(a, b, c, limit):  # type: ignore[no-untyped-def]
    """A safe lower end of the smallest root of 1 + a t + b t^2 + c t^3 in (0, limit], else `limit`.

    The cubic is walked over its monotone pieces; a piece whose end is not clearly positive holds
    the root, which is bisected from the positive side.  "Clearly" means above the rounding error of the
    evaluation, so near-double and near-triple roots count as roots.
    """
    ends = np.empty(3)
    n = 0
    if c != 0.0:  # stationary points of the cubic, in ascending order
        half = b * b - 3.0 * a * c
        if half > 0.0:
            q = -(b + sqrt(half)) if b >= 0.0 else -(b - sqrt(half))
            t1 = q / (3.0 * c)
            t2 = a / q if q != 0.0 else 0.0
            for t in (min(t1, t2), max(t1, t2)):
                if 0.0 < t < limit:
                    ends[n] = t
                    n += 1
    elif b != 0.0 and 0.0 < -a / (2.0 * b) < limit:
        ends[0] = -a / (2.0 * b)
        n = 1
    ends[n] = limit
    low = 0.0
    for k in range(n + 1):
        high = ends[k]
        noise = 8e-16 * (1.0 + high * (abs(a) + high * (abs(b) + high * abs(c))))
        if _value(a, b, c, high) <= noise:
            for _ in range(60):
                middle = 0.5 * (low + high)
                noise = 8e-16 * (1.0 + middle * (abs(a) + middle * (abs(b) + middle * abs(c))))
                if _value(a, b, c, middle) > noise:
                    low = middle
                else:
                    high = middle
            return low
        low = high
    return limit


@inner_kernel
def _det(x, y, z):  # type: ignore[no-untyped-def]
    return (
        x[0] * (y[1] * z[2] - y[2] * z[1])
        + x[1] * (y[2] * z[0] - y[0] * z[2])
        + x[2] * (y[0] * z[1] - y[1] * z[0])
    )


def step_bounds(
    points: NDArray[np.float64],
    directions: NDArray[np.float64],
    tets: NDArray[np.int64],
    limit: float,
    out: NDArray[np.float64],
) -> None:
    """Largest t of each tet with det(D + t dD) > 0 on [0, t], at most `limit`, into out (m,).

    Parameters
    ----------
    points, directions : (n, 3) float64, mm
    tets : (m, 4) int64
        All positive at `points`; a tet that is not gets 0.
    limit : float
    """
    on_threads(_step_bounds, len(tets), points, directions, tets, limit, out)


@kernel
def _step_bounds(first, last, points, directions, tets, limit, out):  # type: ignore[no-untyped-def]
    e, d = np.empty((3, 3)), np.empty((3, 3))
    for t in range(first, last):
        for k in range(3):
            for i in range(3):
                e[k, i] = points[tets[t, k + 1], i] - points[tets[t, 0], i]
                d[k, i] = directions[tets[t, k + 1], i] - directions[tets[t, 0], i]
        base = _det(e[0], e[1], e[2])
        if base <= 0.0:
            out[t] = 0.0
        else:
            a = (_det(d[0], e[1], e[2]) + _det(e[0], d[1], e[2]) + _det(e[0], e[1], d[2])) / base
            b = (_det(e[0], d[1], d[2]) + _det(d[0], e[1], d[2]) + _det(d[0], d[1], e[2])) / base
            out[t] = first_root(a, b, _det(d[0], d[1], d[2]) / base, limit)
