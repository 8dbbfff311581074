"""What a mesh has to hold, and when another attempt is worth it."""

from __future__ import annotations

from volmap.mesh.quality import LabelQuality, QualityTable

LEAST_DIHEDRAL_DEG = 12.0
VOLUME_LIMIT_PCT = 0.5
THIN_VOLUME_LIMIT_PCT = 3.0
MOST_PIECES = 20
MOST_HOLES = 4  # by which the Euler number of a thin label may change without another attempt


def crumbles(table: QualityTable) -> bool:
    """True for labels in so many pieces that shorter edges would only make more of them."""
    return max(row.voxel_pieces for row in table.rows) > MOST_PIECES


def volume_limit_pct(row: LabelQuality) -> float:
    """How far the volume of a label may be off: 0.5 %, 3 % for one thinner than three voxels."""
    return THIN_VOLUME_LIMIT_PCT if row.thin else VOLUME_LIMIT_PCT


def volume_is_off(row: LabelQuality) -> bool:
    """Whether the mesh of a label misses the volume of its voxels."""
    return abs(row.volume_error_pct) > volume_limit_pct(row)


def wrong_rows(table: QualityTable) -> tuple[LabelQuality, ...]:
    """Labels that are lost, miss their volume, fall apart, or are thin and have become full of holes."""
    return tuple(
        row
        for row in table.rows
        if row.tets == 0
        or volume_is_off(row)
        or row.pieces > row.voxel_pieces
        or (row.thin and abs(row.euler - row.voxel_euler) > MOST_HOLES)
    )
