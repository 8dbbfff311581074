"""How thin a label gets, in voxels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import voxels

LOOKED_FOR = 8


def thinnest(mask: NDArray[np.bool_]) -> tuple[int, int, tuple[int, int, int] | None]:
    """Voxels across the thinnest part of a set, up to `LOOKED_FOR`.

    A set is at least m voxels thick when every voxel of it lies within ``ceil(m / 2)`` steps (a step may
    be diagonal) of a cube of m x m x m voxels inside the set.  The allowance of half a cube lets rounded
    edges and corners be; what sticks out farther is a sheet, a fin or a bridge thinner than m.  The answer
    is the largest m up to which all hold: a wall of 1 or 2 voxels says 1 or 2, however it is curved.
    Cubes are counted in voxels, so on uneven voxels the answer is in voxels of whichever direction is the
    thin one.  (A definition of this project; local thickness by inscribed balls, Hildebrand and Rueegsegger
    1997, from memory, is the same idea, but is unsure by a voxel just where sheets are thin.)

    Parameters
    ----------
    mask : (I, J, K) bool
        Not empty.

    Returns
    -------
    voxels : int
    n_thin : int
        Voxels that lie too far from every larger cube; 0 when there are none.
    place : index triple or None
        A voxel that lies in a part that thin; None when the set is `LOOKED_FOR` voxels thick throughout.
    """
    for side in range(2, LOOKED_FOR + 1):
        bare = _far_from_cubes(mask, side)
        if bare.any():
            places = np.argwhere(bare)
            middle = places[np.abs(places - np.median(places, axis=0)).sum(axis=1).argmin()]
            return side - 1, len(places), (int(middle[0]), int(middle[1]), int(middle[2]))
    return LOOKED_FOR, 0, None


def _far_from_cubes(mask: NDArray[np.bool_], side: int) -> NDArray[np.bool_]:
    """Voxels of the set that are too far from every cube of that side within it."""
    reach = (side + 1) // 2
    room = np.pad(mask, side)
    covered = voxels.spread(voxels.fits_cubes(room, side), side + 2 * reach)
    inner = tuple(slice(reach + side, reach + side + n) for n in mask.shape)
    return np.asarray(mask & ~covered[inner])
