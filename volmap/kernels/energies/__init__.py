"""Distortion densities W(s1, s2, s3) of the principal stretches, one file each.

To add one: write a file with a function like those beside this text (value returned, gradient and
Hessian written in place, W = 0 at s = 1), give it the next code in `density` and a name in `ENERGIES`.
It is symmetrised, differentiated in F and made convex in one place, `kernels/distortion.py`.
"""

from __future__ import annotations

from volmap.kernels.compiled import inner_kernel
from volmap.kernels.energies.arap import arap
from volmap.kernels.energies.conformal import conformal
from volmap.kernels.energies.log_strain import log_strain
from volmap.kernels.energies.neo_hookean import neo_hookean
from volmap.kernels.energies.symmetric_dirichlet import symmetric_dirichlet

PLAIN = 1.5  # lambda / mu of "neo-hookean": Poisson's ratio 0.3
SOFT_TISSUE = 9.0  # of "soft-tissue": Poisson's ratio 0.45, as is common practice for soft tissue (no source)

ENERGIES = {
    "symmetric-dirichlet": 0,
    "arap": 1,
    "log-strain": 2,
    "neo-hookean": 3,
    "conformal": 4,
    "soft-tissue": 5,
}


@inner_kernel
def density(code, s, gradient, hessian):  # type: ignore[no-untyped-def]
    """W of the energy with this code; gradient (3,) and hessian (3, 3) are written in place."""
    if code == 0:
        return symmetric_dirichlet(s, gradient, hessian)
    if code == 1:
        return arap(s, gradient, hessian)
    if code == 2:
        return log_strain(s, gradient, hessian)
    if code == 3:
        return neo_hookean(s, gradient, hessian, PLAIN)
    if code == 4:
        return conformal(s, gradient, hessian)
    return neo_hookean(s, gradient, hessian, SOFT_TISSUE)
