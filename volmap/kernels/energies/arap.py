"""As rigid as possible: W = sum (s - 1)^2 (Chao, Pinkall, Sanan & Schroeder, ACM TOG 29(4), 2010)."""

from __future__ import annotations

from volmap.kernels.compiled import inner_kernel


@inner_kernel
def arap(s, gradient, hessian):  # type: ignore[no-untyped-def]
    """Value; gradient (3,) and Hessian (3, 3) in place."""
    value = 0.0
    for i in range(3):
        value += (s[i] - 1.0) ** 2
        gradient[i] = 2.0 * (s[i] - 1.0)
        for j in range(3):
            hessian[i, j] = 2.0 if i == j else 0.0
    return value
