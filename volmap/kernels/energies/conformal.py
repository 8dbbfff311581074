"""Conformal part of AMIPS: W = I1 J^(-2/3) / 3 - 1 (Fu, Liu & Guo, ACM TOG 34(4), 2015).

Blind to volume: useful where angles matter and growth may vary freely.
"""

from __future__ import annotations

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def conformal(s, gradient, hessian):  # type: ignore[no-untyped-def]
    """Value; gradient (3,) and Hessian (3, 3) in place."""
    scale = (s[0] * s[1] * s[2]) ** (-2.0 / 3.0) / 3.0
    first = s[0] * s[0] + s[1] * s[1] + s[2] * s[2]
    for i in range(3):
        gradient[i] = scale * (2.0 * s[i] - 2.0 / 3.0 * first / s[i])
        for j in range(3):
            mixed = 4.0 / 9.0 * first / (s[i] * s[j]) - 4.0 / 3.0 * (s[i] / s[j] + s[j] / s[i])
            hessian[i, j] = scale * mixed
        hessian[i, i] += scale * (2.0 + 2.0 / 3.0 * first / (s[i] * s[i]))
    return scale * first - 1.0
