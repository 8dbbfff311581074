"""What the mesher has to say about a mesh."""

from __future__ import annotations

from volmap.mesh.limits import LEAST_DIHEDRAL_DEG, volume_is_off
from volmap.mesh.quality import LabelQuality, QualityTable
from volmap.types.findings import Finding, Level
from volmap.types.volumes import LabelVolume

LEAST_SHEAR = 1e-3  # cosine between voxel axes that is worth a word


def findings_of(
    labels: LabelVolume,
    table: QualityTable,
    *,
    wrong: tuple[LabelQuality, ...],
    specks: int,
    n_tried: int,
    edge_mm: float,
) -> tuple[Finding, ...]:
    """Findings about the volume and its mesh, most serious first.

    Parameters
    ----------
    wrong : tuple of LabelQuality
        Rows that did not hold on any attempt.
    specks : int
        Pieces of a few tets that took the label around them.
    n_tried : int
        Attempts made.
    edge_mm : float
        Of the attempt kept.
    """
    found = [_not_held(labels, row, n_tried) for row in wrong]
    found += [_topology(labels, row) for row in table.rows if row.tets and _changed(row)]
    found += [_hinged(labels, row) for row in table.rows if row.hinges]
    if table.min_dihedral_deg < LEAST_DIHEDRAL_DEG:
        found.append(_poor(labels, table))
    if labels.grid.shear > LEAST_SHEAR:
        found.append(_sheared(labels))
    found += [_left_out(labels, row) for row in table.rows if row.specks_mm3 > 0]
    if specks:
        found.append(_specks(labels, specks))
    if n_tried > 1:
        found.append(_retried(labels, n_tried, edge_mm))
    return tuple(found)


def _changed(row: LabelQuality) -> bool:
    return row.pieces != row.voxel_pieces or row.euler != row.voxel_euler


def _at(labels: LabelVolume, row: LabelQuality) -> str:
    return f"{labels.name}, {row.name} ({row.label})"


def _not_held(labels: LabelVolume, row: LabelQuality, n_tried: int) -> Finding:
    if row.tets == 0:
        code, what = "label-lost", "the label has no tets: it is smaller or thinner than the edges"
    elif row.pieces > row.voxel_pieces:
        code = "label-fragmented"
        what = f"the mesh has {row.pieces} pieces where the voxels have {row.voxel_pieces}"
    elif volume_is_off(row):
        code, what = "volume-off", f"the volume of the mesh is off by {row.volume_error_pct:+.2f} %"
    else:
        code, what = "label-perforated", "the label is thinner than the edges and its mesh has holes"
    return Finding(
        Level.WARN,
        code,
        _at(labels, row),
        f"{what} (best of {n_tried} attempts)",
        "ask for a shorter edge, or thicken or drop the label",
    )


def _topology(labels: LabelVolume, row: LabelQuality) -> Finding:
    return Finding(
        Level.WARN,
        "topology-changed",
        _at(labels, row),
        f"the voxels have {row.voxel_pieces} pieces and Euler number {row.voxel_euler}, "
        f"the mesh {row.pieces} and {row.euler}",
        "look for contacts through edges, noise, or parts thinner than the edge length",
    )


def _hinged(labels: LabelVolume, row: LabelQuality) -> Finding:
    return Finding(
        Level.WARN,
        "hinge",
        _at(labels, row),
        f"{row.hinges} of its pieces hang by an edge or a point only, so they may turn freely",
        "join or separate the pieces in the segmentation",
    )


def _poor(labels: LabelVolume, table: QualityTable) -> Finding:
    return Finding(
        Level.WARN,
        "poor-tets",
        labels.name,
        f"the smallest dihedral angle is {table.min_dihedral_deg:.1f} degrees, "
        f"less than {LEAST_DIHEDRAL_DEG:g}",
        "clean salt-and-pepper voxels from the segmentation, or ask for a shorter edge",
    )


def _sheared(labels: LabelVolume) -> Finding:
    return Finding(
        Level.WARN,
        "sheared-affine",
        labels.name,
        f"voxel axes are not at right angles (largest cosine {labels.grid.shear:.3f}): "
        "the tets are sheared with them and their angles suffer",
        "resample the scan onto an orthogonal grid",
    )


def _left_out(labels: LabelVolume, row: LabelQuality) -> Finding:
    return Finding(
        Level.NOTE,
        "pieces-left-out",
        _at(labels, row),
        f"pieces of {row.specks_mm3:.3g} mm3 together are smaller than half an edge cubed "
        "and do not count in the volume asked of the mesh",
        "drop them from the segmentation, or ask for a shorter edge",
    )


def _specks(labels: LabelVolume, specks: int) -> Finding:
    return Finding(
        Level.NOTE,
        "specks",
        labels.name,
        f"{specks} pieces of fewer than six tets took the label around them",
    )


def _retried(labels: LabelVolume, n_tried: int, edge_mm: float) -> Finding:
    return Finding(
        Level.WARN,
        "retried",
        labels.name,
        f"{n_tried} attempts were made; the one kept has edges of {edge_mm:.3g} mm",
    )
