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
        Share of a boundary match that acts across the normal.  It acts as friction against sliding: it
        damps steps, and the smaller it is, the fewer of them sliding takes.  A solve that still slides after
        many steps goes on with a tenth of it.
    one_to_one : bool
        Keep the image of the outer boundary from crossing itself, at every step.
    contact_voxels : float
        Parts of that boundary nearer than this share of a voxel repel each other.
    first_weight, weight_factor, last_weight : float
        The ladder of boundary weights, in units of ``(0.02 V^(1/3))^-2``, V the volume of the target body.
    steps_a_rung : int
        Newton steps at most before the weight rises.
    most_steps : int
        Newton steps at most in all.
    settle : float
        Relative decrease of the objective a step below which it counts as settled; also, on average over a
        few steps, of the objective with fresh matches.
    start : str
        'auto' (several starts, the one with the smallest residual), or the name of one start.
    seed : int
        Of the random subsamples the alignment uses.
    """

    energy: str = "soft-tissue"
    uncertainty_mm: float | None = None
    uncertainty_voxels: float = 0.1
    across: float = 0.003
    one_to_one: bool = True
    contact_voxels: float = 0.15
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
        _require(self.uncertainty_voxels > 0, "uncertainty_voxels", self.uncertainty_voxels, "above 0")
        _require(0 < self.contact_voxels <= 1, "contact_voxels", self.contact_voxels, "above 0, up to 1")
        _require(0 <= self.across <= 1, "across", self.across, "from 0 to 1")
        _require(
            0 < self.first_weight <= self.last_weight, "first_weight", self.first_weight, "up to the last"
        )
        _require(self.weight_factor > 1, "weight_factor", self.weight_factor, "above 1")
        _require(self.steps_a_rung >= 1, "steps_a_rung", self.steps_a_rung, "at least 1")
        _require(self.most_steps >= 1, "most_steps", self.most_steps, "at least 1")
        _require(0 < self.settle < 1, "settle", self.settle, "between 0 and 1")


def _require(holds: bool, name: str, found: float, expected: str) -> None:
    if not holds:
        raise InputError(
            "a setting of the map is out of its range", where=name, found=str(found), expected=expected
        )
