"""Labels at places between voxel centres."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.compiled import kernel

# A place half-way between two voxels belongs to the lower one, however its last bits were rounded.
_HALF_WAY = 1e-6


def nearest_labels(labels: NDArray[np.uint16], index: NDArray[np.float64]) -> NDArray[np.uint16]:
    """The label of the voxel that holds each place.

    Parameters
    ----------
    labels : (I, J, K) uint16
    index : (..., 3) float64
        Continuous voxel indices; NaN allowed.

    Returns
    -------
    (...) uint16
        0 where no voxel holds the place.
    """
    locked = np.ascontiguousarray(labels, np.uint16).view()
    locked.setflags(write=False)
    found = np.empty(index.shape[:-1], np.uint16)
    _look_up(locked, plain(index, np.float64).reshape(-1, 3), found.reshape(-1))
    return found


@kernel
def _look_up(labels, index, found):  # type: ignore[no-untyped-def]
    """Round each index, half-way down."""
    for n in range(index.shape[0]):
        i = np.ceil(index[n, 0] - 0.5 - _HALF_WAY)
        j = np.ceil(index[n, 1] - 0.5 - _HALF_WAY)
        k = np.ceil(index[n, 2] - 0.5 - _HALF_WAY)
        found[n] = 0
        if 0 <= i < labels.shape[0] and 0 <= j < labels.shape[1] and 0 <= k < labels.shape[2]:
            found[n] = labels[int(i), int(j), int(k)]
