"""A map sampled on a voxel grid: displacements, labels, volume ratio.

Which way is which (phi is the map, y = phi(x)): the forward field lives on SOURCE's grid and holds
phi(x) - x; the backward field lives on TARGET's grid and holds phi^-1(y) - y.  For phi(x) = 2x the forward
field at 10 is +10, the backward field at 20 is -10: one is never the other negated in place.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.rasterise import tets_on_grid, values_on_grid
from volmap.types import Grid, GridField, ImageVolume, LabelCodes, LabelVolume, TetMesh, VolumeMap


def forward_field(volume_map: VolumeMap, grid: Grid) -> GridField:
    """Displacements ``u = phi(x) - x`` at the voxel centres of SOURCE's grid.

    Parameters
    ----------
    volume_map : VolumeMap
    grid : Grid
        Of SOURCE, or any grid in SOURCE's world.

    Returns
    -------
    GridField
        Exact at each voxel centre inside the mesh (linear in the tet that holds it), NaN outside.
    """
    mesh = volume_map.mesh
    displacement = values_on_grid(
        grid.to_index(mesh.points), mesh.tets, volume_map.images - mesh.points, grid.shape
    )
    return GridField(grid, displacement, volume_map.source, volume_map.target)


def backward_field(volume_map: VolumeMap, grid: Grid) -> GridField:
    """Displacements ``phi^-1(y) - y`` at the voxel centres of TARGET's grid.

    The inverse is exact: each centre is looked up in the image mesh.

    Parameters
    ----------
    volume_map : VolumeMap
    grid : Grid
        Of TARGET, or any grid in TARGET's world.
    """
    return forward_field(volume_map.reversed(), grid)


def tets_at_centres(mesh: TetMesh, grid: Grid) -> NDArray[np.int32]:
    """(I, J, K) the tet that holds each voxel centre; -1 outside."""
    return tets_on_grid(grid.to_index(mesh.points), mesh.tets, grid.shape)


def carried_solid(
    volume_map: VolumeMap,
    grid: Grid,
    *,
    names: Mapping[int, str] | None = None,
    codes: Mapping[int, LabelCodes] | None = None,
) -> LabelVolume:
    """SOURCE's labelled solid on TARGET's grid: the label of the tet at each voxel centre.

    Parameters
    ----------
    volume_map : VolumeMap
    grid : Grid
        Of TARGET.
    names : mapping of int to str, optional
        Names of the labels.
    codes : mapping of int to LabelCodes, optional
        What the labels are in codes.

    Returns
    -------
    LabelVolume
        0 outside the image of the mesh.
    """
    owner = tets_at_centres(volume_map.image_mesh, grid)
    labels = np.append(volume_map.mesh.labels, 0).astype(np.uint16)[owner]  # owner -1 takes the last
    labels.setflags(write=False)
    return LabelVolume(grid, labels, names or {}, "carried_labels", codes or {})


def volume_ratio_image(volume_map: VolumeMap, grid: Grid) -> ImageVolume:
    """J, volume in TARGET over volume in SOURCE, at the voxel centres of SOURCE's grid.

    Parameters
    ----------
    volume_map : VolumeMap
    grid : Grid
        Of SOURCE.

    Returns
    -------
    ImageVolume
        Constant in each tet; NaN outside the mesh.
    """
    owner = tets_at_centres(volume_map.mesh, grid)
    ratio = np.append(volume_map.volume_ratio, np.nan).astype(np.float32)[owner]
    ratio.setflags(write=False)
    return ImageVolume(grid, ratio, "1", "volume_ratio")
