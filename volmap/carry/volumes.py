"""Volumes through the exact inverse: each voxel of the new grid asks where it came from."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from volmap.carry.fields import tets_at_centres
from volmap.kernels.nearest import nearest_labels
from volmap.kernels.rasterise import values_by_slab
from volmap.kernels.trilinear import sample
from volmap.types import (
    Finding,
    Grid,
    ImageVolume,
    InputError,
    LabelVolume,
    Level,
    TetMesh,
    VolumeMap,
)


def pull_labels(
    volume: LabelVolume, volume_map: VolumeMap, onto: Grid
) -> tuple[LabelVolume, tuple[Finding, ...]]:
    """Labels on another grid: each voxel takes the label of the voxel its exact preimage falls in.

    Parameters
    ----------
    volume : LabelVolume
        In the map's SOURCE.
    volume_map : VolumeMap
    onto : Grid
        In the map's TARGET.

    Returns
    -------
    LabelVolume
        0 outside the image of the body, and where the preimage is beyond the volume.
    findings : tuple of Finding
    """
    findings = _covering(volume.grid, onto, volume_map, volume.name)
    labels = np.zeros(onto.shape, np.uint16)
    for slab, index in _preimages(volume.grid, volume_map, onto):
        labels[slab] = nearest_labels(volume.labels, index)
    carried = replace(volume, grid=onto, labels=labels)
    return carried, findings + _losses(volume, carried, volume_map.mesh)


def pull_image(
    volume: ImageVolume, volume_map: VolumeMap, onto: Grid
) -> tuple[ImageVolume, tuple[Finding, ...]]:
    """Intensities on another grid: each voxel takes the trilinear value at its exact preimage.

    Returns
    -------
    ImageVolume
        NaN outside the image of the body, and where the preimage is beyond the volume.  Intensities move;
        they are not multiplied by the volume ratio.
    findings : tuple of Finding
    """
    findings = _covering(volume.grid, onto, volume_map, volume.name)
    values = np.empty(onto.shape, np.float32)
    for slab, index in _preimages(volume.grid, volume_map, onto):
        values[slab] = sample(volume.values[..., None], index.reshape(-1, 3)).reshape(index.shape[:3])
    return ImageVolume(onto, values, volume.unit, volume.name), findings


def _preimages(of: Grid, volume_map: VolumeMap, onto: Grid) -> Iterator[tuple[slice, NDArray[np.float64]]]:
    """For each slab of `onto`, the voxel indices in `of` that its centres come from; NaN outside."""
    image_mesh = volume_map.image_mesh
    index_values = of.to_index(volume_map.mesh.points)
    return values_by_slab(onto.to_index(image_mesh.points), image_mesh.tets, index_values, onto.shape)


def _covering(of: Grid, onto: Grid, volume_map: VolumeMap, name: str) -> tuple[Finding, ...]:
    """Do both grids hold the body?  Refused when either holds none of it.

    Raises
    ------
    InputError
    """
    findings = []
    for grid, mesh, space, what in (
        (of, volume_map.mesh, volume_map.source, "the volume"),
        (onto, volume_map.image_mesh, volume_map.target, "the grid to carry onto"),
    ):
        missing = 1.0 - _covered(grid, mesh)
        if missing == 1.0 and (tets_at_centres(mesh, grid) < 0).all():
            raise InputError(
                f"{what} holds no part of the body in {space}",
                where=name,
                remedy="check the direction, and that it belongs to this scan",
                refused=True,
            )
        if missing > 0:
            sentence = f"{what} leaves out {100 * missing:.2g} % of the body in {space}"
            findings.append(
                Finding(Level.WARN, "not-covered", name, sentence, "use a grid that holds all of it")
            )
    return tuple(findings)


def _covered(grid: Grid, mesh: TetMesh) -> float:
    """Part of the body's volume, by tet centroids, inside the outer faces of the grid's voxels."""
    index = grid.to_index(mesh.points[mesh.tets].mean(axis=1))
    inside = ((index >= -0.5) & (index <= np.array(grid.shape) - 0.5)).all(axis=1)
    volumes = np.abs(mesh.volumes)
    return 1.0 if inside.all() else float(volumes[inside].sum() / volumes.sum())


def _losses(volume: LabelVolume, carried: LabelVolume, mesh: TetMesh) -> tuple[Finding, ...]:
    """Labels that are gone, and labels of which a part lies outside the body and stayed behind."""
    before = np.bincount(volume.labels.ravel(), minlength=65536)
    outside = tets_at_centres(mesh, volume.grid) < 0
    left = np.bincount(volume.labels[outside], minlength=65536)
    present = carried.present
    findings = []
    for label in volume.present:
        if label not in present:
            sentence = f"{volume.name_of(label)} has no voxel on the new grid"
            findings.append(Finding(Level.WARN, "label-lost", volume.name, sentence))
        part = left[label] / before[label]
        if part > 0.05:
            sentence = (
                f"{100 * part:.0f} % of {volume.name_of(label)} lies outside the body and was not carried"
            )
            findings.append(Finding(Level.WARN, "outside-left-out", volume.name, sentence))
    return tuple(findings)
