"""How things are carried."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class CarrySettings:
    """How things are carried.

    Parameters
    ----------
    reach_mm : float
        Points up to this far outside the body are carried with the nearest tet's affine map, and named in a
        finding; a voxel of the scan (`Grid.voxel_mm`) is a good choice.  Points farther out: landmarks are
        left out and named; a mesh or surface is refused.
    """

    reach_mm: float = 1.0


AS_USUAL = CarrySettings()
