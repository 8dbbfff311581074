"""A grid as the standard can hold it: orthogonal axes, the third the cross product of the first two.

PS3.3 gives the third axis no attribute of its own (C.7.6.16.2.4, Plane Orientation; C.20.3.1.3, the
deformation grid): it is the cross product of the two direction cosines.  A left-handed grid is laid anew by
counting its last index from the other end, which moves no voxel; planes of an image may be listed in any
order, since each says its own place.  Turning RAS+ into LPS keeps handedness.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.grid import Grid

_LPS = np.diag([-1.0, -1.0, 1.0])
_NOISE = 1e-6  # of direction cosines that a file stored as float32: kept as they are
_BENT_SHARE = 0.01  # of the smallest voxel edge: how far squaring the axes may move a voxel


@dataclass(frozen=True, eq=False)
class Laid:
    """A grid in LPS.

    Parameters
    ----------
    shape : tuple of 3 int
    origin : (3,) float64, mm, LPS
        Centre of the first voxel.
    axes : (3, 3) float64
        Columns: unit directions of i, j, k in LPS; right-handed and orthonormal but for float32 noise.
    spacing : (3,) float64
        mm.
    turned : bool
        True when k is counted from the other end.
    """

    shape: tuple[int, int, int]
    origin: NDArray[np.float64]
    axes: NDArray[np.float64]
    spacing: NDArray[np.float64]
    turned: bool

    def in_order(self, voxels: NDArray[Any]) -> NDArray[Any]:
        """Voxels (I, J, K, ...) in the order of this grid."""
        return voxels[:, :, ::-1] if self.turned else voxels

    @property
    def orientation(self) -> list[str]:
        """Image Orientation (Patient): directions of growing i and growing j."""
        return decimals(self.axes[:, :2].T.ravel())

    def place(self, k: int) -> int:
        """Which plane of this grid, from 0, plane `k` of the grid as it was is."""
        return self.shape[2] - 1 - k if self.turned else k

    def position(self, k: int = 0) -> list[str]:
        """Image Position (Patient) of the first voxel of plane `k` of this grid."""
        return decimals(self.origin + self.axes[:, 2] * self.spacing[2] * k)


def laid(grid: Grid, *, where: str) -> Laid:
    """The same voxels at the same places, laid as the standard can hold them.

    Parameters
    ----------
    grid : Grid
    where : str
        Name for the error.

    Raises
    ------
    InputError
        Axes that are not at right angles (`at_right_angles`).
    """
    if not at_right_angles(grid):
        raise InputError(
            "the axes of its grid are not orthogonal, which DICOM cannot hold",
            where=where,
            found=f"a cosine of {grid.shear:.3g} between two axes",
            expected="right angles",
            remedy="resample it onto a grid with right angles first (labels by nearest neighbour)",
            refused=True,
        )
    turned = grid.handedness == "left"
    first = np.array([0.0, 0.0, grid.shape[2] - 1.0 if turned else 0.0])
    steps = _LPS @ (grid.affine[:3, :3] / grid.spacing) @ np.diag([1.0, 1.0, -1.0 if turned else 1.0])
    axes = _rotation(steps)
    if np.abs(axes - steps).max() < _NOISE:
        axes = steps
    return Laid(grid.shape, _LPS @ grid.to_world(first[None])[0], axes, grid.spacing, turned)


def at_right_angles(grid: Grid) -> bool:
    """True when squaring the axes moves no voxel by more than a hundredth of the smallest voxel edge."""
    steps = grid.affine[:3, :3] / grid.spacing
    reach_mm = (np.array(grid.shape) - 1.0) * grid.spacing
    moved_mm = np.linalg.norm((_rotation(steps) - steps) * reach_mm, axis=0).sum()
    return bool(moved_mm <= _BENT_SHARE * grid.spacing.min())


def squared(grid: Grid) -> Grid:
    """A grid with right angles that covers every voxel of `grid`, with voxels as small.

    Parameters
    ----------
    grid : Grid
        Of any axes.

    Returns
    -------
    Grid
        Axes of the nearest rotation; one voxel more where it is needed at an end.
    """
    steps = grid.affine[:3, :3] / grid.spacing
    axes, spacing = _rotation(steps), grid.spacing
    corners = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
    along = grid.to_world(corners * (np.array(grid.shape) - 1)) @ axes
    low, high = along.min(axis=0), along.max(axis=0)
    counts = np.ceil((high - low) / spacing - 1e-6).astype(int) + 1
    affine = np.eye(4)
    affine[:3, :3] = axes * spacing
    affine[:3, 3] = axes @ low
    return Grid((int(counts[0]), int(counts[1]), int(counts[2])), affine)


def _rotation(steps: NDArray[np.float64]) -> NDArray[np.float64]:
    """Nearest orthonormal axes (Fan & Hoffman, Proc. AMS 6, 1955): the polar factor."""
    left, _, right = np.linalg.svd(steps)
    return np.asarray(left @ right)


def decimals(values: NDArray[np.float64]) -> list[str]:
    """Numbers as Decimal Strings: at most 16 characters (PS3.5, 6.2), as exact as that allows."""
    from pydicom.valuerep import format_number_as_ds

    return [format_number_as_ds(float(v) + 0.0) for v in values]
