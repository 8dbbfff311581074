"""Symmetric Dirichlet: W = sum (s^2 + s^-2) / 2 - 3.

Schreiner, Asirvatham, Praun & Hoppe, ACM TOG 23(3), 2004.
"""

from __future__ import annotations

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def symmetric_dirichlet(s, gradient, hessian):  # type: ignore[no-untyped-def]
    """Value; gradient (3,) and Hessian (3, 3) in place."""
    value = -3.0
    for i in range(3):
        t = 1.0 / s[i]
        value += 0.5 * (s[i] * s[i] + t * t)
        gradient[i] = s[i] - t * t * t
        for j in range(3):
            hessian[i, j] = 1.0 + 3.0 * t * t * t * t if i == j else 0.0
    return value
