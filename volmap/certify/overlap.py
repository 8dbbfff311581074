"""Gate: Dice of the carried solid against the voxels, with a limit that knows the label's size."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged
from volmap.certify.table import Limit
from volmap.kernels.rasterise import tets_on_grid
from volmap.types.certificate import Gate
from volmap.types.tetmesh import TetMesh
from volmap.types.volumes import LabelVolume


def dice(first: NDArray[np.bool_], second: NDArray[np.bool_]) -> float:
    """Twice the common voxels over the sum of both (Dice 1945).

    Raises
    ------
    ValueError
        Both empty: that is undefined, not 1.
    """
    total = int(first.sum()) + int(second.sum())
    if total == 0:
        raise ValueError("Dice of two empty regions is undefined")
    return 2.0 * int((first & second).sum()) / total


def shell_dice(volume_mm3: float, shell_mm: float) -> float:
    """Dice of a ball of that volume and the same ball with a uniform shell around it.

    With radius r and shell h, ``D = 2 r^3 / (r^3 + (r + h)^3)``.
    """
    radius = _radius(volume_mm3)
    return float(2.0 / (1.0 + (1.0 + shell_mm / radius) ** 3))


def equivalent_shell_mm(volume_mm3: float, overlap: float) -> float:
    """The shell that would explain a Dice coefficient on a ball of that volume (inverse of `shell_dice`)."""
    if overlap <= 0.0:
        return float("nan")
    return float(_radius(volume_mm3) * ((2.0 / overlap - 1.0) ** (1 / 3) - 1.0))


def _radius(volume_mm3: float) -> float:
    return float((3.0 * volume_mm3 / (4.0 * np.pi)) ** (1 / 3))


def drawn(mesh: TetMesh, like: LabelVolume) -> NDArray[np.uint16]:
    """(I, J, K) label of the tet at each voxel centre of a grid; 0 outside the mesh."""
    owner = tets_on_grid(like.grid.to_index(mesh.points), mesh.tets, like.grid.shape)
    label_of_owner = np.append(mesh.labels, 0).astype(np.uint16)  # owner -1, outside, takes the last
    return label_of_owner[owner]


def overlap(evidence: Evidence, limit: Limit) -> Gate:
    """Dice per label of the mesh on SOURCE's grid and of its image on TARGET's."""
    worlds = {
        "source": (evidence.map.mesh, evidence.source, evidence.source_mesh_labels),
        "target": (evidence.map.image_mesh, evidence.target, evidence.target_mesh_labels),
    }
    warn, fail = limit.warns_at(evidence.voxel_mm), limit.fails_at(evidence.voxel_mm)
    per_label: dict[str, Any] = {}
    for space, (mesh, scan, own) in worlds.items():
        solid = drawn(mesh, scan)
        per_label[space] = {
            str(label): _row(label, solid, scan, own, warn.get("shell_above"), fail.get("shell_above"))
            for label in sorted({*mesh.present, *scan.present})
        }
    return _gate(per_label, evidence, limit)


def _row(
    label: int,
    solid: NDArray[np.uint16],
    scan: LabelVolume,
    own: LabelVolume | None,
    warn_mm: float | None,
    fail_mm: float | None,
) -> dict[str, float | None]:
    voxels = scan.labels == label
    volume = float(max(int(voxels.sum()), 1) * scan.grid.voxel_mm3)
    if not voxels.any() and not (solid == label).any():
        return {"dice": None, "shell_mm": None}
    found = dice(solid == label, voxels)
    shell = equivalent_shell_mm(volume, found)
    row: dict[str, float | None] = {"dice": found, "shell_mm": shell if np.isfinite(shell) else None}
    row["dice_warns_below"] = None if warn_mm is None else shell_dice(volume, warn_mm)
    row["dice_fails_below"] = None if fail_mm is None else shell_dice(volume, fail_mm)
    if own is not None and ((own.labels == label).any() or voxels.any()):
        row["dice_of_own_mesh"] = dice(own.labels == label, voxels)
    return row


def _gate(per_label: dict[str, Any], evidence: Evidence, limit: Limit) -> Gate:
    rows = [(space, int(k), row) for space, labels in per_label.items() for k, row in labels.items()]
    shells = [float("nan") if row["shell_mm"] is None else row["shell_mm"] for _, _, row in rows]
    worst = float("nan") if np.isnan(shells).any() else max(shells)
    lowest = min(rows, key=lambda r: -1.0 if r[2]["dice"] is None else r[2]["dice"])
    found = lowest[2]["dice"]
    value = {"lowest_dice": found, "shell_mm": worst if np.isfinite(worst) else None, "per_label": per_label}
    sentence = (
        f"The lowest Dice coefficient is {0.0 if found is None else found:.3f} "
        f"({evidence.name_of(lowest[1])} on {lowest[0]}'s grid); "
        f"the worst overlap is that of a ball of the label's volume and a shell of {worst:.2f} mm."
    )
    return judged(limit, {"shell": worst}, value=value, sentence=sentence, voxel_mm=evidence.voxel_mm)
