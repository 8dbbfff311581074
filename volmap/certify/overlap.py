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


def dice(common: NDArray[np.int64], row: int) -> float:
    """Twice the common voxels over the sum of both (Dice 1945).

    Parameters
    ----------
    common : (n, n) int64
        From `common_voxels`.
    row : int
        Of the label.

    Raises
    ------
    ValueError
        Both empty: that is undefined, not 1.
    """
    total = int(common[row].sum() + common[:, row].sum())
    if total == 0:
        raise ValueError("Dice of two empty regions is undefined")
    return 2.0 * int(common[row, row]) / total


def common_voxels(
    first: NDArray[np.uint16], second: NDArray[np.uint16], labels: list[int]
) -> NDArray[np.int64]:
    """How many voxels hold each pair of labels.

    Parameters
    ----------
    first, second : (I, J, K) uint16
    labels : list of int
        Ascending, above 0; everything else counts as outside.

    Returns
    -------
    (n + 1, n + 1) int64
        Row and column 0 are outside, the others are in the order of `labels`.
    """
    n = len(labels) + 1
    row = np.zeros(65536, np.int64)
    row[labels] = np.arange(1, n)
    found = np.zeros(n * n, np.int64)
    for a, b in zip(first, second, strict=True):  # by planes, so that nothing of the grid's size is made
        found += np.bincount((row[a] * n + row[b]).ravel(), minlength=n * n)
    return found.reshape(n, n)


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
        labels = sorted({*mesh.present, *scan.present})
        common = common_voxels(drawn(mesh, scan), scan.labels, labels)
        ideal = None if own is None else common_voxels(own.labels, scan.labels, labels)
        per_label[space] = {
            str(label): _row(i, common, ideal, scan, warn.get("shell_above"), fail.get("shell_above"))
            for i, label in enumerate(labels, 1)
        }
    return _gate(per_label, evidence, limit)


def _row(
    i: int,
    common: NDArray[np.int64],
    ideal: NDArray[np.int64] | None,
    scan: LabelVolume,
    warn_mm: float | None,
    fail_mm: float | None,
) -> dict[str, float | None]:
    voxels = int(common[:, i].sum())
    volume = float(max(voxels, 1) * scan.grid.voxel_mm3)
    if not voxels and not common[i].any():
        return {"dice": None, "shell_mm": None}
    found = dice(common, i)
    shell = equivalent_shell_mm(volume, found)
    row: dict[str, float | None] = {"dice": found, "shell_mm": shell if np.isfinite(shell) else None}
    row["dice_warns_below"] = None if warn_mm is None else shell_dice(volume, warn_mm)
    row["dice_fails_below"] = None if fail_mm is None else shell_dice(volume, fail_mm)
    if ideal is not None and (voxels or ideal[i].any()):
        row["dice_of_own_mesh"] = dice(ideal, i)
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
