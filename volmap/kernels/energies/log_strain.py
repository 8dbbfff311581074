"""Logarithmic (Hencky) strain: W = sum (ln s)^2 (Hencky, Z. techn. Phys. 9, 1928)."""

from __future__ import annotations

from math import log

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def log_strain(s, gradient, hessian):  # type: ignore[no-untyped-def]
    """Value; gradient (3,) and Hessian (3, 3) in place."""
    value = 0.0
    for i in range(3):
        t = log(s[i])
        value += t * t
        gradient[i] = 2.0 * t / s[i]
        for j in range(3):
            hessian[i, j] = 2.0 * (1.0 - t) / (s[i] * s[i]) if i == j else 0.0
    return value
