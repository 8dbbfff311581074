"""How a solve ended."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from volmap.types.given_boundary import GivingWay
from volmap.types.volume_map import VolumeMap


class Status(Enum):
    """How a solve ended; each member is a sentence."""

    SETTLED = "The boundaries agree within the declared uncertainty and the distortion has settled."
    BOUNDARY_NOT_REACHED = (
        "The distortion has settled, but the boundaries still differ by more than the declared uncertainty."
    )
    GIVEN_BOUNDARY_NOT_KEPT = (
        "The distortion has settled, but the given boundary is not kept within its tolerance everywhere."
    )
    OUT_OF_STEPS = "The allowed number of steps ran out before the map settled."
    STALLED = "No step that keeps every tet positive makes the map better; it stopped before it settled."

    @property
    def finished(self) -> bool:
        """True when the solve did what it set out to do."""
        return self is Status.SETTLED


@dataclass(frozen=True)
class IterationRecord:
    """One Newton step.

    Parameters
    ----------
    step : int
    boundary_weight : float
        Weight of the boundary term, 1/mm2.
    energy, distortion : float
        Total objective and its distortion part (dimensionless).
    residual_mm : float
        Root mean square boundary residual, both ways.
    step_length : float
        Share of the Newton step taken.
    linear_iterations : int
    smallest_ratio : float
        Smallest J.
    tets : int
        Of the mesh the step was taken on.
    """

    step: int
    boundary_weight: float
    energy: float
    distortion: float
    residual_mm: float
    step_length: float
    linear_iterations: int
    smallest_ratio: float
    tets: int = 0


@dataclass(frozen=True)
class Outcome:
    """A map, how it ended, and what happened on the way.

    Parameters
    ----------
    map : VolumeMap
        The best valid map found; every tet positive, also when not finished.
    status : Status
    history : tuple of IterationRecord
    start : str
        Which alignment start was chosen, with the residuals of all that were tried.
    notes : tuple of str
        What was treated in a special way (accidental contacts, for instance).
    giving_way : tuple of GivingWay
        With a given boundary: what other tolerances would cost, strictest first.
    """

    map: VolumeMap
    status: Status
    history: tuple[IterationRecord, ...]
    start: str = ""
    notes: tuple[str, ...] = ()
    giving_way: tuple[GivingWay, ...] = ()
