"""Where the voxels of a new grid come from: each asks the exact inverse of the map."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.carry.fields import tets_at_centres
from volmap.kernels.rasterise import values_by_slab
from volmap.types import Finding, Grid, InputError, Level, TetMesh, VolumeMap

Floats = NDArray[np.float64]


class Preimages(NamedTuple):
    """Some planes of the new grid.

    Attributes
    ----------
    slab : slice
        Along i.
    known : (slab, J, K) bool
        The voxels whose centre lies in the image of the body.
    at : (n, 3) float64
        Their preimages, as continuous voxel indices of the old grid.
    gradients : (m, 3, 3) float64
        F, ``dy = F dx``, of the tets they lie in.
    of_voxel : (n,) int64
        Which of these belongs to each voxel.
    """

    slab: slice
    known: NDArray[np.bool_]
    at: Floats
    gradients: Floats
    of_voxel: NDArray[np.int64]


def preimages(of: Grid, volume_map: VolumeMap, onto: Grid, *, gradients: bool = False) -> Iterator[Preimages]:
    """For each slab of `onto`, the places in `of` that its voxel centres come from.

    Parameters
    ----------
    of : Grid
        In the map's SOURCE.
    volume_map : VolumeMap
    onto : Grid
        In the map's TARGET.
    gradients : bool
        Without it `Preimages.gradients` and `of_voxel` are empty.
    """
    image_mesh = volume_map.image_mesh
    points = onto.to_index(image_mesh.points)
    owner = tets_at_centres(image_mesh, onto) if gradients else None
    for slab, index in values_by_slab(
        points, image_mesh.tets, of.to_index(volume_map.mesh.points), onto.shape
    ):
        known = ~np.isnan(index[..., 0])
        there, of_voxel = np.empty((0, 3, 3)), np.empty(0, np.int64)
        if owner is not None:
            tets, of_voxel = np.unique(owner[slab][known], return_inverse=True)
            there = volume_map.gradients[tets]
        yield Preimages(slab, known, index[known], there, of_voxel)


def covering(of: Grid, onto: Grid, volume_map: VolumeMap, name: str) -> tuple[Finding, ...]:
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
