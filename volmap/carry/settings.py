"""How things are carried."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Literal

from volmap.types import Rules

LabelMode = Literal["nearest", "one-hot", "shares"]
ImageMode = Literal["linear", "cubic"]
REACH_MM = 1.0


@dataclass(frozen=True)
class CarrySettings:
    """How things are carried.

    Parameters
    ----------
    reach_mm : float, optional
        Points up to this far outside the body are carried with the nearest tet's affine map, and named in a
        finding.  Points farther out: landmarks and measurements are left out and named; a mesh or surface is
        refused.  None: a voxel of the scan a file is carried from (`Grid.voxel_mm`), else `REACH_MM`.
    labels : 'nearest', 'one-hot' or 'shares', optional
        How label volumes are carried (see `label_volumes.LABEL_SENTENCES`); nearest where nobody said.
    image : 'linear' or 'cubic', optional
        How values between voxel centres are found (see `splines.interpolator`); linear where nobody said.
    bends : bool
        Give polylines a point more wherever their image bends, so that it is exact between their points too.
    rules : Rules
        How numbers change, where the thing does not say so itself (see `types.Rule`).  Of a volume `of_all`
        counts; None keeps intensities as they are, and refuses vectors and tensors.
    """

    reach_mm: float | None = None
    labels: LabelMode | None = None
    image: ImageMode | None = None
    bends: bool = True
    rules: Rules = field(default_factory=Rules)

    @property
    def reach(self) -> float:
        """`reach_mm`, or what it is where nobody said, mm."""
        return REACH_MM if self.reach_mm is None else self.reach_mm

    @property
    def label_mode(self) -> LabelMode:
        """`labels`, or what it is where nobody said."""
        return self.labels or "nearest"

    @property
    def image_mode(self) -> ImageMode:
        """`image`, or what it is where nobody said."""
        return self.image or "linear"

    def of_scan(self, voxel_mm: float) -> CarrySettings:
        """The same settings, with a reach of one voxel where none was said."""
        return self if self.reach_mm is not None else replace(self, reach_mm=voxel_mm)


AS_USUAL = CarrySettings()
