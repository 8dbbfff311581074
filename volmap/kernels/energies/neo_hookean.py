"""Compressible neo-Hookean solid, mu = 1: W = (I1 - 3)/2 - ln J + lambda (ln J)^2 / 2.

Bonet & Wood, Nonlinear Continuum Mechanics for Finite Element Analysis (2008), eq. 6.28 (from memory).
"""

from __future__ import annotations

from math import log

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def neo_hookean(s, gradient, hessian, first_lame):  # type: ignore[no-untyped-def]
    """Value; gradient (3,) and Hessian (3, 3) in place; `first_lame` is lambda over mu."""
    log_j = log(s[0] * s[1] * s[2])
    value = -1.5 - log_j + 0.5 * first_lame * log_j * log_j
    pull = first_lame * log_j - 1.0
    for i in range(3):
        value += 0.5 * s[i] * s[i]
        gradient[i] = s[i] + pull / s[i]
        for j in range(3):
            hessian[i, j] = first_lame / (s[i] * s[j])
        hessian[i, i] += 1.0 - pull / (s[i] * s[i])
    return value
