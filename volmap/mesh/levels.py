"""One volume meshed at several edge lengths, for solvers that start coarse."""

from __future__ import annotations

from dataclasses import dataclass, replace

from volmap.mesh.attempt import Rung, attempted
from volmap.mesh.limits import LEAST_DIHEDRAL_DEG
from volmap.mesh.mesher import MeshResult, mesh_prepared, table_of
from volmap.mesh.prepare import Prepared, prepare
from volmap.mesh.quality import LabelQuality, QualityTable
from volmap.mesh.settings import MeshSettings
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.progress import Progress, silent
from volmap.types.volumes import LabelVolume

COARSE_VOLUME_LIMIT_PCT = 50.0  # it is where to start, no more: its surfaces count as that much less certain


@dataclass(frozen=True, eq=False)
class MeshLevels:
    """A mesh of a volume and coarser ones of the same volume.

    Attributes
    ----------
    fine : MeshResult
        What `mesh` gives.
    coarser : tuple of MeshResult
        Next to the fine one first: edges of twice, four times, ... the fine one's.  Each has the labels, the
        pieces and the Euler numbers of the fine mesh, and meets the same limit on angles; those that do not
        are left out, so there may be gaps and there may be none at all.
    left_out : tuple of Finding
        A note for each level left out, with the reason.
    """

    fine: MeshResult
    coarser: tuple[MeshResult, ...]
    left_out: tuple[Finding, ...]


def mesh_levels(
    labels: LabelVolume,
    settings: MeshSettings | None = None,
    *,
    coarser: int = 2,
    progress: Progress = silent,
) -> MeshLevels:
    """The mesh of a volume and up to `coarser` coarser ones, from one preparation of the voxels.

    Parameters
    ----------
    labels : LabelVolume
    settings : MeshSettings, optional
        Of the fine mesh.
    coarser : int
        How many times the edge is doubled.
    progress : Progress

    Raises
    ------
    InputError
        When the fine mesh cannot be made; see `mesh`.
    """
    prepared = prepare(labels)
    fine = mesh_prepared(prepared, labels, settings or MeshSettings(), progress)
    kept, left_out = [], []
    for level in range(1, coarser + 1):
        progress("coarse meshes", level, coarser)
        found = _coarse(prepared, labels, fine, 2.0**level)
        if isinstance(found, MeshResult):
            kept.append(found)
        else:
            left_out.append(found)
    return MeshLevels(fine, tuple(kept), tuple(left_out))


def _coarse(prepared: Prepared, labels: LabelVolume, fine: MeshResult, times: float) -> MeshResult | Finding:
    """A mesh with edges so many times as long, or why there is none; made in one attempt."""
    assert fine.settings.edge_mm is not None
    settings = replace(fine.settings, edge_mm=times * fine.settings.edge_mm)
    rung = Rung(times * fine.settings.edge_mm, settings.smoothing_voxels, settings.refine)
    try:
        attempt = attempted(prepared, rung, silent, name=labels.name)
    except InputError:
        return _left_out(labels, rung.edge_mm, "nothing of the body is large enough for the lattice")
    table = table_of(attempt, prepared, labels)
    why = why_not(table, fine.quality)
    return _left_out(labels, rung.edge_mm, why) if why else MeshResult(attempt.mesh, table, (), settings)


def why_not(coarse: QualityTable, fine: QualityTable) -> str:
    """What keeps a coarse mesh from standing for the fine one; empty when nothing does."""
    if coarse.inverted_tets or coarse.min_dihedral_deg < LEAST_DIHEDRAL_DEG:
        return f"the smallest dihedral angle is {coarse.min_dihedral_deg:.1f} degrees"
    pairs = zip(coarse.rows, fine.rows, strict=True)
    return "; ".join(f"{row.name}: {why}" for row, like in pairs if (why := _unlike(row, like)))


def _unlike(row: LabelQuality, fine: LabelQuality) -> str:
    """How one label of a coarse mesh differs from the fine one's; empty when it does not."""
    if (row.tets == 0) != (fine.tets == 0):
        return "no tets"
    if (row.pieces, row.euler, row.hinges) != (fine.pieces, fine.euler, fine.hinges):
        return (
            f"pieces {row.pieces} and Euler number {row.euler} instead of {fine.pieces} and {fine.euler}, "
            f"hinges {row.hinges} instead of {fine.hinges}"
        )
    off_pct = 100.0 * (row.volume_mm3 / fine.volume_mm3 - 1.0) if fine.tets else 0.0
    return f"the volume differs by {off_pct:+.1f} %" if abs(off_pct) > COARSE_VOLUME_LIMIT_PCT else ""


def _left_out(labels: LabelVolume, edge_mm: float, why: str) -> Finding:
    return Finding(
        Level.NOTE, "coarse-level-left-out", labels.name, f"no mesh with edges of {edge_mm:.3g} mm: {why}"
    )
