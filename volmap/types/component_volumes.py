"""Vectors and symmetric tensors on a grid."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.grid import Grid
from volmap.types.volumes import digest


@dataclass(frozen=True, eq=False)
class VectorVolume(Frozen):
    """A vector a voxel: a direction, a flow, a gradient; not a displacement field (`GridField`).

    Parameters
    ----------
    grid : Grid
    values : (I, J, K, 3) float32
        Components along x, y, z of the world, RAS+.  All NaN where not defined.
    unit : str
    name : str
    """

    grid: Grid
    values: NDArray[np.float32]
    unit: str = ""
    name: str = "vectors"

    def __post_init__(self) -> None:
        _require_whole(self._own("values", np.float32, (*self.grid.shape, 3)), self.name)

    @property
    def sha256(self) -> str:
        """Digest of the components and the affine."""
        return digest(self.values.astype("<f4"), self.grid.affine)


@dataclass(frozen=True, eq=False)
class TensorVolume(Frozen):
    """A symmetric tensor a voxel.

    Parameters
    ----------
    grid : Grid
    values : (I, J, K, 6) float32
        xx, yx, yy, zx, zy, zz, the lower triangle row by row, in the world's axes, RAS+.  All NaN where
        not defined.
    unit : str
    name : str
    """

    ROWS: ClassVar[tuple[int, ...]] = (0, 1, 1, 2, 2, 2)
    COLUMNS: ClassVar[tuple[int, ...]] = (0, 0, 1, 0, 1, 2)

    grid: Grid
    values: NDArray[np.float32]
    unit: str = ""
    name: str = "tensors"

    def __post_init__(self) -> None:
        _require_whole(self._own("values", np.float32, (*self.grid.shape, 6)), self.name)

    @property
    def sha256(self) -> str:
        """Digest of the components and the affine."""
        return digest(self.values.astype("<f4"), self.grid.affine)


def _require_whole(values: NDArray[np.float32], name: str) -> None:
    """Refuse infinite components, and voxels that have some components only."""
    for plane in values:  # nothing of the grid's size is made
        if np.isinf(plane).any():
            raise InputError("holds infinite components", where=name, remedy=_NO_VALUE, refused=True)
        holes = np.isnan(plane)
        if (holes.any(axis=-1) != holes.all(axis=-1)).any():
            raise InputError(
                "holds voxels with some components only", where=name, remedy=_NO_VALUE, refused=True
            )


_NO_VALUE = "write NaN for all components where there is no value"
