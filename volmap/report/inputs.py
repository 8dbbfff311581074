"""What a report is written from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types import (
    Certificate,
    ImageVolume,
    InputError,
    IterationRecord,
    LabelVolume,
    LandmarkPairs,
    Surface,
    VolumeMap,
)
from volmap.types.frozen import Frozen


@dataclass(frozen=True, eq=False)
class ReportInput(Frozen):
    """One map with its evidence and what it was made from.

    Parameters
    ----------
    map : VolumeMap
        From SOURCE into TARGET.
    certificate : Certificate
        May lack gates, hold gates that were not assessed, or speak of a solve that did not finish.
    source, target : LabelVolume
    target_surface : Surface
        The target's label surfaces, TARGET's world.
    source_image, target_image : ImageVolume, optional
        Backgrounds of the cuts; without one the label voxels are shown.
    checks : LandmarkPairs, optional
        Guides and checks; `points` in SOURCE, `to_points` in TARGET.
    carried, baseline : (n, 3) float64, mm, RAS+, optional
        Where the map, and the affine baseline, send each point of `checks`; NaN where it lies outside.
    history : tuple of IterationRecord
        Steps of the solve; empty when they are not known.
    settings : mapping
        As used; shown whole, and told in words where the words are known.
    title : str

    Raises
    ------
    InputError
        Carried or baseline points without landmarks, or not one of each.
    """

    map: VolumeMap
    certificate: Certificate
    source: LabelVolume
    target: LabelVolume
    target_surface: Surface
    source_image: ImageVolume | None = None
    target_image: ImageVolume | None = None
    checks: LandmarkPairs | None = None
    carried: NDArray[np.float64] | None = None
    baseline: NDArray[np.float64] | None = None
    history: tuple[IterationRecord, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    title: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "history", tuple(self.history))
        for name in ("carried", "baseline"):
            if getattr(self, name) is None:
                continue
            if self.checks is None:
                raise InputError(f"{name} points without landmarks", where=f"ReportInput.{name}")
            self._own(name, np.float64, (len(self.checks.points), 3))

    @property
    def labels(self) -> tuple[int, ...]:
        """Labels of the mesh, ascending."""
        return self.map.mesh.present
