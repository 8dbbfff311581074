"""What a boundary that is off by its residual does to a volume.

Move each place of a closed surface by v: to first order in |v| the volume inside changes by the integral of
v . n over the surface (the transport theorem).  With v the way from the map's surface of a label to the
scan's own, three numbers follow:

* difference: the integral itself, what the scan's own surface holds more than the map's solid does;
* bound: the integral of |v . n|, which no errors of these sizes exceed, whichever way they point;
* standard: errors of these sizes that point both ways partly cancel, the more so the shorter the patches
  over which they hang together.  Cut the surface into patches and take the root of the sum of squares of the
  integrals over them: were the patches independent, that is the standard deviation of the whole (for a
  stationary residual of deviation s that hangs together over an area a it is s sqrt(A a) on an area A).
  Patches smaller than the correlation length say too little; so cubes from one voxel up to the whole body
  are tried, each twice as wide as the one before, and the largest answer counts.  The whole body is among
  them, so it is never below the difference, and never above the bound.

One surface is one throw of its kind.  On a sphere of 20 mm radius with Gaussian residuals that hang together
over 0.5, 2, 5, 10, 20, 40 mm (150 throws each) the volume error of another throw stays within this number in
82, 73, 64, 62, 53, 52 % of cases (its own always does): over lengths as large as the body it is too small.

Parts of the scan's surface that no place of the map's comes near do not show that way, so all is done from
the scan's surface to the map's as well, and the larger answer counts.

Patches of a surface take the place of stretches of time in the method of batch means for correlated samples
(Flyvbjerg & Petersen, J. Chem. Phys. 91, 1989, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from volmap.measure.residual import Residual, Ways


@dataclass(frozen=True)
class VolumeUncertainty:
    """By how much a volume may be off; see the module.

    Parameters
    ----------
    difference_mm3, standard_mm3, bound_mm3 : float
    """

    difference_mm3: float
    standard_mm3: float
    bound_mm3: float


def volume_uncertainty(residual: Residual, *, voxel_mm: float) -> VolumeUncertainty:
    """From the residual of a label's boundary to the uncertainty of its volume.

    Parameters
    ----------
    residual : Residual
    voxel_mm : float
        Width of the smallest patches.
    """
    both = (residual.to_scan, residual.to_map)
    return VolumeUncertainty(
        float((residual.to_scan.offset_mm * residual.to_scan.areas).sum()),
        max(_batched(ways, voxel_mm) for ways in both),
        max(float(np.abs(ways.offset_mm * ways.areas).sum()) for ways in both),
    )


def _batched(ways: Ways, voxel_mm: float) -> float:
    """Root of the sum of squares of the integrals over patches, for the width that makes it largest; mm3."""
    pieces = ways.offset_mm * ways.areas
    origin = ways.points.min(axis=0)
    span = float((ways.points - origin).max())
    worst, width = float(pieces.sum()) ** 2, voxel_mm
    while width <= span:
        i, j, k = np.floor((ways.points - origin) / width).astype(np.int64).T
        side = int(span / width) + 1
        patch = np.unique((i * side + j) * side + k, return_inverse=True)[1]
        worst = max(worst, float((np.bincount(patch, pieces) ** 2).sum()))
        width *= 2
    return float(np.sqrt(worst))
