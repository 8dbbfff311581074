"""How things are carried."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from volmap.types import Rule

LabelMode = Literal["nearest", "one-hot", "shares"]
ImageMode = Literal["linear", "cubic"]


@dataclass(frozen=True)
class CarrySettings:
    """How things are carried.

    Parameters
    ----------
    reach_mm : float
        Points up to this far outside the body are carried with the nearest tet's affine map, and named in a
        finding; a voxel of the scan (`Grid.voxel_mm`) is a good choice.  Points farther out: landmarks are
        left out and named; a mesh or surface is refused.
    labels : 'nearest', 'one-hot' or 'shares'
        How label volumes are carried (see `label_volumes.LABEL_SENTENCES`).
    image : 'linear' or 'cubic'
        How values between voxel centres are found (see `splines.interpolator`).
    rule : Rule, optional
        How numbers change; None keeps intensities as they are, and refuses vectors and tensors.
    """

    reach_mm: float = 1.0
    labels: LabelMode = "nearest"
    image: ImageMode = "linear"
    rule: Rule | None = None


AS_USUAL = CarrySettings()
