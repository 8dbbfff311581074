"""By how much it would help to give way to a given boundary: the solve again at other tolerances."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.tets import signed_volumes
from volmap.mapping.given_boundary import KeptBoundary
from volmap.types import GivingWay, IterationRecord, Progress, TetMesh, silent

Floats = NDArray[np.float64]

LOOSER, STRICTER = (4.0, 2.0), (0.5, 0.0)  # times the tolerance asked for


class _Place(Protocol):
    """Where a solve is."""

    images: Floats
    history: list[IterationRecord]


State = TypeVar("State", bound=_Place)


def giving_way(
    mesh: TetMesh,
    kept: KeptBoundary,
    *,
    start: State,
    found: State,
    climb: Callable[[State], State],
    progress: Progress = silent,
) -> tuple[GivingWay, ...]:
    """What a map costs at several tolerances, strictest first.

    Looser ones are solved from the start, stricter ones from where the solve ended: a map that was squeezed
    is no good start for one that need not be.

    Parameters
    ----------
    mesh : TetMesh
    kept : KeptBoundary
        Its tolerance is changed for each solve and set back.
    start, found : State
        Before the first step, and where the solve at the tolerance asked for ended.
    climb : callable
        From a state to a settled one, at the present tolerance.
    progress : Progress
    """
    asked, rows = kept.tolerance_mm, [_row(mesh, kept, found)]
    done = 0
    for times_of, state in ((LOOSER, start), (STRICTER, found)):
        for times in times_of:
            kept.tolerance_mm = times * asked
            progress("giving way", done, len(LOOSER) + len(STRICTER), f"{kept.tolerance_mm:.3g} mm")
            state = climb(state)
            rows.append(_row(mesh, kept, state))
            done += 1
    kept.tolerance_mm = asked
    return tuple(sorted(rows, key=lambda row: row.tolerance_mm))


def _row(mesh: TetMesh, kept: KeptBoundary, state: _Place) -> GivingWay:
    ratio = signed_volumes(state.images, mesh.tets) / mesh.volumes
    worst = int(ratio.argmin())
    centre = mesh.points[mesh.tets[worst]].mean(axis=0)
    return GivingWay(
        kept.tolerance_mm,
        kept.kept(state.images),
        kept.rms(state.images),
        float(kept.deviations(state.images).max()),
        state.history[-1].distortion,
        float(ratio[worst]),
        (float(centre[0]), float(centre[1]), float(centre[2])),
    )
