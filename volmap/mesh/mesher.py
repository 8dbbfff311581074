"""From a label volume to one conforming mesh, with a ladder of attempts."""

from __future__ import annotations

from dataclasses import dataclass, replace

from volmap.mesh.attempt import Attempt, Rung, attempted
from volmap.mesh.facts import voxel_facts
from volmap.mesh.labelled import lattice_edge, lattice_size
from volmap.mesh.limits import LEAST_DIHEDRAL_DEG, crumbles, wrong_rows
from volmap.mesh.prepare import Prepared, prepare
from volmap.mesh.quality import QualityTable, quality_table
from volmap.mesh.settings import MeshSettings
from volmap.mesh.verdicts import findings_of
from volmap.types.errors import InputError
from volmap.types.findings import Finding
from volmap.types.progress import Progress, silent
from volmap.types.tetmesh import TetMesh
from volmap.types.volumes import LabelVolume

SMALLEST_DEFAULT_VOXELS = 0.75  # no default edge is shorter: the voxels say nothing finer
MOST_TETS = 3_000_000  # what a laptop's memory holds through the map; no edge that gives more is tried


@dataclass(frozen=True, eq=False)
class MeshResult:
    """A mesh and how good it is.

    Attributes
    ----------
    mesh : TetMesh
        World mm, RAS+.
    quality : QualityTable
    findings : tuple of Finding
    settings : MeshSettings
        As used: `edge_mm`, `smoothing_voxels` and `refine` are those of the attempt that was kept.
    """

    mesh: TetMesh
    quality: QualityTable
    findings: tuple[Finding, ...]
    settings: MeshSettings


def mesh(
    labels: LabelVolume, settings: MeshSettings | None = None, *, progress: Progress = silent
) -> MeshResult:
    """One conforming tetrahedral mesh for all labels of a volume.

    Parameters
    ----------
    labels : LabelVolume
    settings : MeshSettings, optional
    progress : Progress

    Raises
    ------
    InputError
        A volume without labels, a body too small for the edge length, or an edge that would give more than
        `MOST_TETS`.

    Notes
    -----
    Body-centred-cubic lattice, snapped to and split at the ties of smoothed labels (after Labelle & Shewchuk
    2007 and Boltcheva, Yvinec & Boissonnat 2009), improved by guarded relocation.  When a label misses its
    volume or falls apart, finer attempts follow and the best one is kept.
    """
    return mesh_prepared(prepare(labels), labels, settings or MeshSettings(), progress)


def mesh_prepared(
    prepared: Prepared, labels: LabelVolume, settings: MeshSettings, progress: Progress
) -> MeshResult:
    """`mesh` of a volume that has been prepared already."""
    _require_affordable(settings, prepared.body_volume, labels.name)
    best: tuple[float, Attempt, QualityTable] | None = None
    n_tried = 0
    for rung in rungs(settings, prepared.body_volume, prepared.grid.voxel_mm):
        attempt = attempted(prepared, rung, progress, name=labels.name)
        table = table_of(attempt, prepared, labels)
        n_tried += 1
        shortfall = sum(row.voxel_mm3 for row in wrong_rows(table))
        shortfall += 1e12 * (table.min_dihedral_deg < LEAST_DIHEDRAL_DEG or table.inverted_tets > 0)
        if best is None or shortfall < best[0]:
            best = (shortfall, attempt, table)
        if shortfall == 0.0 or crumbles(table):
            break
    assert best is not None
    _, kept, table = best
    used = replace(
        settings,
        edge_mm=kept.rung.edge_mm,
        smoothing_voxels=kept.rung.smoothing_voxels,
        refine=kept.rung.refine,
    )
    findings = findings_of(
        labels, table, wrong=wrong_rows(table), specks=kept.specks, n_tried=n_tried, edge_mm=kept.rung.edge_mm
    )
    return MeshResult(kept.mesh, table, findings, used)


def table_of(attempt: Attempt, prepared: Prepared, labels: LabelVolume) -> QualityTable:
    """How good an attempt is, held against the voxels."""
    facts = voxel_facts(prepared, attempt.targets)
    return quality_table(attempt.mesh, facts, {k: labels.name_of(k) for k in facts})


def _require_affordable(settings: MeshSettings, volume_mm3: float, name: str) -> None:
    """Refuse, before any memory is taken, an edge so short that no machine would finish.

    Raises
    ------
    InputError
    """
    if settings.edge_mm is None:
        return
    n_tets = lattice_size(volume_mm3, settings.edge_mm)
    if n_tets > MOST_TETS:
        raise InputError(
            "the edge is too short for this body",
            where=name,
            found=f"edges of {settings.edge_mm:.3g} mm, which give about {n_tets:,.0f} tets",
            expected=f"at most {MOST_TETS:,} tets",
            remedy=f"ask for edges of {1.01 * lattice_edge(volume_mm3, MOST_TETS):.3g} mm or longer",
            refused=True,
        )


def rungs(settings: MeshSettings, volume_mm3: float, voxel_mm: float) -> tuple[Rung, ...]:
    """The attempts to make: as asked, sharper and finer in thin parts, then with shorter edges if few enough.

    Parameters
    ----------
    volume_mm3 : float
        Of the body.
    voxel_mm : float
    """
    edge = settings.edge_mm
    if edge is None:
        edge = max(lattice_edge(volume_mm3, settings.wanted_tets), SMALLEST_DEFAULT_VOXELS * voxel_mm)
    sharp, finer = min(1.0, settings.smoothing_voxels), max(settings.refine, 2)
    first = Rung(edge, settings.smoothing_voxels, settings.refine)
    later = [
        Rung(edge, sharp, min(settings.refine + 1, 3)),
        Rung(0.7 * edge, sharp, finer),
        Rung(0.5 * edge, sharp, finer),
    ]
    return (first, *(r for r in later if lattice_size(volume_mm3, r.edge_mm) <= settings.max_tets))
