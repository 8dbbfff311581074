"""Regions of a map as parts of its tets."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.partial_volumes import tets_in_labels
from volmap.types import LabelVolume, VolumeMap


@dataclass(frozen=True, eq=False)
class Region:
    """The part of a body that a region takes up.

    Parameters
    ----------
    number : int
    name : str
    tets : (k,) int64
        Tets it takes part of, ascending.
    source_mm3 : (k,) float64
        How much of each, in SOURCE.
    drawn_mm3 : dict of str to float
        Volume of its voxels, where it was drawn: 'source', 'target' or, for a label of the scans, both.
    outside_mm3 : float
        Part of its voxels outside the mesh, in the world it was drawn in; NaN for a label of the map.
    is_label : bool
    """

    number: int
    name: str
    tets: NDArray[np.int64]
    source_mm3: NDArray[np.float64]
    drawn_mm3: dict[str, float]
    outside_mm3: float = float("nan")
    is_label: bool = False


def label_regions(volume_map: VolumeMap, source: LabelVolume, target: LabelVolume) -> list[Region]:
    """The labels of a map: whole tets, so volumes are those of the mesh, without sampling."""
    mesh = volume_map.mesh
    scans = {"source": source, "target": target}
    counts = {side: np.bincount(scan.labels.ravel(), minlength=65536) for side, scan in scans.items()}
    found = []
    for label in mesh.present:
        own = np.flatnonzero(mesh.labels == label)
        drawn = {side: float(counts[side][label] * scan.grid.voxel_mm3) for side, scan in scans.items()}
        name = source.name_of(label)
        found.append(Region(label, name, own, mesh.volumes[own], drawn, is_label=True))
    return found


def drawn_regions(volume_map: VolumeMap, drawn: LabelVolume, *, side: str) -> list[Region]:
    """Regions drawn in one of the scans.

    Voxels are boxes, and tets are cut at their faces exactly: nothing is sampled.

    Parameters
    ----------
    volume_map : VolumeMap
    drawn : LabelVolume
        On any grid in the world of `side`.
    side : str
        'source' or 'target'.
    """
    body = volume_map.mesh if side == "source" else volume_map.image_mesh
    tet, label, volume = tets_in_labels(drawn.grid.to_index(body.points), body.tets, drawn.labels)
    volume *= drawn.grid.voxel_mm3
    ratio = np.ones(len(body.tets)) if side == "source" else 1.0 / volume_map.volume_ratio
    voxels = np.bincount(drawn.labels.ravel(), minlength=65536)
    found = []
    for number in drawn.present:
        own = label == number
        tets, held = tet[own], volume[own]
        whole = float(voxels[number] * drawn.grid.voxel_mm3)
        outside = max(whole - float(held.sum()), 0.0)
        found.append(Region(number, drawn.name_of(number), tets, held * ratio[tets], {side: whole}, outside))
    return found
