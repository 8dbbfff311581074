"""Where the voxels of a new grid come from: each asks the exact inverse of the map."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.carry.fields import tets_at_centres
from volmap.carry.points import gradients_at, move_points
from volmap.kernels.rasterise import values_by_slab
from volmap.types import Finding, Grid, InputError, Level, MapChain, TetMesh, VolumeMap

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
    continued, lost : int
        Voxels carried from outside a body on the way, and those not carried for lying too far outside it.
    """

    slab: slice
    known: NDArray[np.bool_]
    at: Floats
    gradients: Floats
    of_voxel: NDArray[np.int64]
    continued: int
    lost: int


def preimages(
    of: Grid,
    volume_map: VolumeMap | MapChain,
    onto: Grid,
    *,
    gradients: bool = False,
    reach_mm: float = 0.0,
) -> Iterator[Preimages]:
    """For each slab of `onto`, the places in `of` that its voxel centres come from.

    Through a chain each centre goes back through the last map, and its place in the scan before, which is on
    no grid, through the maps before that one: exact all the way, nothing is sampled between.

    Parameters
    ----------
    of : Grid
        In the map's SOURCE.
    volume_map : VolumeMap or MapChain
    onto : Grid
        In the map's TARGET.
    gradients : bool
        Without it `Preimages.gradients` and `of_voxel` are empty.
    reach_mm : float
        Of a chain: in the scans on the way the bodies of two maps are nearly but not quite the same; places
        up to this far outside the next body are carried with its nearest tet's affine map.
    """
    last, before = volume_map.maps[-1], volume_map.maps[:-1]
    owner = tets_at_centres(last.image_mesh, onto) if gradients else None
    back = MapChain(tuple(step.reversed() for step in reversed(before))) if before else None
    points = last.mesh.points if before else of.to_index(last.mesh.points)
    for slab, found in values_by_slab(
        onto.to_index(last.image_mesh.points), last.mesh.tets, points, onto.shape
    ):
        known = ~np.isnan(found[..., 0])
        at, there, of_voxel = found[known], np.empty((0, 3, 3)), np.empty(0, np.int64)
        if owner is not None:
            tets, of_voxel = np.unique(owner[slab][known], return_inverse=True)
            there = last.gradients[tets]
        continued = lost = 0
        if back is not None:
            moved = move_points(back, at, reach_mm=reach_mm)
            home, continued = moved.carried, int(moved.extrapolated.sum())
            lost = len(at) - int(home.sum())
            known[known] = home
            at = of.to_index(moved.points[home])
            if owner is not None:
                there = there[of_voxel[home]] @ np.linalg.inv(gradients_at(back, moved)[home])
                of_voxel = np.arange(len(at))
        yield Preimages(slab, known, at, there, of_voxel, continued, lost)


class Joints:
    """Counts what happened to voxels where the bodies of two maps of a chain differ."""

    def __init__(self) -> None:
        self.continued = self.lost = 0

    def add(self, part: Preimages) -> None:
        """Count the voxels of some planes."""
        self.continued += part.continued
        self.lost += part.lost

    def findings(self, name: str, reach_mm: float) -> tuple[Finding, ...]:
        """What is to be said of them."""
        findings = []
        if self.continued:
            sentence = (
                f"{self.continued} voxels come from up to {reach_mm:.3g} mm outside the next map's body in a "
                "scan on the way and were carried with the affine map of its nearest tet, not measured"
            )
            findings.append(Finding(Level.NOTE, "outside-carried", name, sentence))
        if self.lost:
            sentence = (
                f"{self.lost} voxels come from farther outside the next map's body in a scan on the way and "
                "were left empty"
            )
            findings.append(Finding(Level.WARN, "outside-left-out", name, sentence))
        return tuple(findings)


def covering(of: Grid, onto: Grid, volume_map: VolumeMap | MapChain, name: str) -> tuple[Finding, ...]:
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
