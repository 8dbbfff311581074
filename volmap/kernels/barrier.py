"""A barrier between near parts of a surface (Li et al., ACM TOG 39(4), 2020)."""

from __future__ import annotations

from math import log, sqrt

import numpy as np

from volmap.kernels.compiled import inner_kernel, kernel


@inner_kernel
def barrier(distance, reach):  # type: ignore[no-untyped-def]
    """``-(d - r)^2 ln(d / r)`` with its first and second derivative; all 0 from d = r on, infinite at 0."""
    if distance >= reach:
        return 0.0, 0.0, 0.0
    if distance <= 0.0:
        return np.inf, -np.inf, np.inf
    short = distance - reach
    logarithm = log(distance / reach)
    value = -short * short * logarithm
    first = -2.0 * short * logarithm - short * short / distance
    second = -2.0 * logarithm - 4.0 * short / distance + short * short / (distance * distance)
    return value, first, second


@kernel
def add_barrier(pairs, reach, strength, gradient, normals, stiffness):  # type: ignore[no-untyped-def]
    """Sum of the barriers of all pairs; its gradient is added, its stiffness along each gap written.

    Parameters
    ----------
    strength : float
        Factor of each pair's barrier.
    gradient : (n, 3) float64
    normals, stiffness : (k, 3), (k,) float64
        Unit gap and second derivative along it: the convex part of the pair's second derivative.
    """
    total = 0.0
    for k in range(len(pairs.corners)):
        distance = sqrt(pairs.gaps[k, 0] ** 2 + pairs.gaps[k, 1] ** 2 + pairs.gaps[k, 2] ** 2)
        value, first, second = barrier(distance, reach)
        total += strength * value
        stiffness[k] = strength * second
        for i in range(3):
            normals[k, i] = pairs.gaps[k, i] / distance if distance > 0.0 else 0.0
        for c in range(4):
            for i in range(3):
                gradient[pairs.corners[k, c], i] += strength * first * pairs.weights[k, c] * normals[k, i]
    return total
