"""Choices of the mapping stage."""

from __future__ import annotations

from dataclasses import dataclass

from volmap.kernels.energies import ENERGIES
from volmap.types import InputError


@dataclass(frozen=True)
class MapSettings:
    """How a map is solved for.

    Parameters
    ----------
    energy : str
        Distortion density, one of `volmap.kernels.energies.ENERGIES`; always symmetrised.
    uncertainty_mm : float or None
        Declared uncertainty of the segmentations' boundaries, mm (root mean square).  The boundary
        weight stops rising when the residual is inside it.  None: `uncertainty_voxels` of a voxel.
    uncertainty_voxels : float
        The same as a share of a voxel (cube root of its volume), the mean of both scans.
    across : float
        Share of a boundary match that acts across the normal; small, so that the boundary can slide.
    first_weight, weight_factor, last_weight : float
        The ladder of boundary weights, in units of ``(0.02 V^(1/3))^-2``.
    steps_a_rung : int
        Newton steps at most before the weight rises.
    most_steps : int
        Newton steps at most in all.
    settle : float
        Relative change of the objective below which it counts as settled.
    start : str
        'auto' (several starts, the one with the smallest residual), or the name of one start.
    seed : int
        Of the random subsamples the alignment uses.
    """

    energy: str = "soft-tissue"
    uncertainty_mm: float | None = None
    uncertainty_voxels: float = 0.1
    across: float = 0.05
    first_weight: float = 0.01
    weight_factor: float = 3.1622776601683795
    last_weight: float = 10.0
    steps_a_rung: int = 4
    most_steps: int = 120
    settle: float = 1e-4
    start: str = "auto"
    seed: int = 0

    def __post_init__(self) -> None:
        if self.energy not in ENERGIES:
            raise InputError(
                "the energy is unknown", where="--energy", found=self.energy, expected=", ".join(ENERGIES)
            )
        if self.uncertainty_mm is not None and not self.uncertainty_mm > 0:
            raise InputError(
                "the boundary uncertainty must be above 0 mm",
                where="--uncertainty",
                found=str(self.uncertainty_mm),
            )
