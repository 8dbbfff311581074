"""Cheap and safe answers to "is there anything near here?", by blocks of voxels."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.kernels.labelfield import LabelField

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def _blocks(values: NDArray[Any], size: Ints, reduce: Callable[..., NDArray[Any]]) -> NDArray[Any]:
    """One value a block of ``size`` voxels; the last blocks are filled up with 0."""
    padded = np.pad(values, [(0, int(-n % k)) for n, k in zip(values.shape, size, strict=True)])
    a, b, c = (int(n // k) for n, k in zip(padded.shape, size, strict=True))
    return reduce(padded.reshape(a, int(size[0]), b, int(size[1]), c, int(size[2])), axis=(1, 3, 5))


def _block_of(points: Floats, field: LabelField, size: Ints, margin: Ints, shape: tuple[int, ...]) -> Any:
    """Index of the block each point is in, in an array with `margin` blocks around; the outermost beyond."""
    block = np.floor((points / field.spacing + 0.5) / size).astype(np.int64) + margin
    return tuple(np.clip(block, 0, np.array(shape) - 1).T)


def near_body(field: LabelField, points: Floats, reach_mm: float) -> NDArray[np.bool_]:
    """(n,) True for every point within reach of a labelled voxel, and for some a little farther."""
    size = np.maximum(1, np.floor(0.25 * reach_mm / field.spacing)).astype(np.int64)
    radius = np.ceil(reach_mm / (size * field.spacing)).astype(np.int64) + 1
    full = np.pad(_blocks(field.labels > 0, size, np.any), [(int(r) + 1, int(r) + 1) for r in radius])
    for axis in range(3):
        full = ndimage.maximum_filter1d(full, 2 * int(radius[axis]) + 1, axis=axis)
    return np.asarray(full[_block_of(points, field, size, radius + 1, full.shape)])
