"""A displacement sampled on a grid."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.grid import Grid


@dataclass(frozen=True, eq=False)
class GridField(Frozen):
    """``y = x + u(x)`` at the voxel centres x of a grid.

    Parameters
    ----------
    grid : Grid
        Where x lives.
    displacement : (I, J, K, 3) float32, mm, RAS+ components
        NaN where the map is not defined (outside the mesh).
    grid_space, points_into : str
        Names of the scan the grid belongs to and of the scan y lives in.
    """

    grid: Grid
    displacement: NDArray[np.float32]
    grid_space: str = "source"
    points_into: str = "target"

    def __post_init__(self) -> None:
        u = self._own("displacement", np.float32, (*self.grid.shape, 3))
        for plane in u:  # one at a time: a large field is large enough
            holes = np.isnan(plane)
            if any((holes[..., 0] != holes[..., d]).any() for d in (1, 2)):
                raise InputError(
                    "a displacement is either a whole vector or NaN", where="GridField.displacement"
                )

    @property
    def support(self) -> NDArray[np.uint8]:
        """(I, J, K) 1 where the field is defined."""
        return np.asarray(~np.isnan(self.displacement[..., 0]), np.uint8)
