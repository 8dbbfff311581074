"""Counting on voxel arrays."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Mask = NDArray[np.bool_]


def euler_number(mask: Mask) -> int:
    """Euler number of a voxel set whose voxels are joined through faces (6-connected).

    The cells are counted: voxels, minus pairs that share a face, plus full 2 x 2 squares, minus full
    2 x 2 x 2 cubes (Kong and Rosenfeld 1989, section on the Euler number of (6, 26) pictures; from
    memory).  Equals pieces + voids - handles, with voids counted 26-connected.

    Parameters
    ----------
    mask : (I, J, K) bool
    """
    cells, sign = np.asarray(mask, bool), 1
    total = int(np.count_nonzero(cells))
    pairs = [_both(cells, axis) for axis in range(3)]
    squares = [_both(pairs[a], b) for a, b in ((0, 1), (0, 2), (1, 2))]
    cubes = _both(squares[0], 2)
    for layer in (pairs, squares, [cubes]):
        sign = -sign
        total += sign * sum(int(np.count_nonzero(part)) for part in layer)
    return total


def face_contacts(labels: NDArray[Any]) -> dict[tuple[int, int], NDArray[np.int64]]:
    """How many voxel faces each pair of values shares, by axis.

    Parameters
    ----------
    labels : (I, J, K) whole numbers from 0 to 65535

    Returns
    -------
    dict
        ``{(a, b): (3,) int64}`` with a < b, 0 included.
    """
    found: dict[tuple[int, int], NDArray[np.int64]] = {}
    for axis in range(3):
        low, high = _neighbours(labels, axis)
        apart = low != high
        a, b = low[apart].astype(np.int64), high[apart].astype(np.int64)
        keys, counts = np.unique(np.minimum(a, b) * 65536 + np.maximum(a, b), return_counts=True)
        for key, count in zip(keys.tolist(), counts.tolist(), strict=True):
            pair = (key // 65536, key % 65536)
            found.setdefault(pair, np.zeros(3, np.int64))[axis] += count
    return dict(sorted(found.items()))


def lonely_voxels(labels: NDArray[Any]) -> Mask:
    """Voxels above 0 that differ from at least 5 of their 6 neighbours; beyond the array is 0."""
    agree = np.zeros(labels.shape, np.int8)
    for axis in range(3):
        low, high = _neighbours(labels, axis)
        same = low == high
        first, second = _neighbours(agree, axis)
        first += same
        second += same
    return np.asarray((agree <= 1) & (labels > 0))


def one_voxel_gaps(labels: NDArray[Any]) -> int:
    """Background voxels with two different labels on opposite sides."""
    count = 0
    for axis in range(3):
        along = np.moveaxis(labels, axis, 0)
        before, here, after = along[:-2], along[1:-1], along[2:]
        count += int(np.count_nonzero((here == 0) & (before > 0) & (after > 0) & (before != after)))
    return count


def fits_cubes(mask: Mask, side: int) -> Mask:
    """Where a cube of voxels fits into a set.

    Returns
    -------
    (I - side + 1, J - side + 1, K - side + 1) bool
        True at the cube's lowest corner; the caller keeps each length of the mask at least `side`.
    """
    fits = mask
    for axis in range(3):
        fits = _window(fits, axis, side, np.logical_and)
    return fits


def spread(corners: Mask, side: int) -> Mask:
    """All voxels of the cubes whose lowest corners are given; (I + side - 1, ...) bool."""
    padded = np.pad(corners, side - 1)
    for axis in range(3):
        padded = _window(padded, axis, side, np.logical_or)
    return padded


def _window(values: Mask, axis: int, length: int, join: Any) -> Mask:
    """Join `length` neighbours along an axis, by doubling."""
    done = 1
    while done < length:
        step = min(done, length - done)
        n = values.shape[axis] - step
        at = [slice(None)] * 3
        other = [slice(None)] * 3
        at[axis], other[axis] = slice(0, n), slice(step, None)
        values = join(values[tuple(at)], values[tuple(other)])
        done += step
    return values


def _both(mask: Mask, axis: int) -> Mask:
    low, high = _neighbours(mask, axis)
    return np.asarray(low & high)


def _neighbours(values: NDArray[Any], axis: int) -> tuple[NDArray[Any], NDArray[Any]]:
    """Views of all voxels but the last, and all but the first, along an axis."""
    at = [slice(None)] * 3
    at[axis] = slice(None, -1)
    low = values[tuple(at)]
    at[axis] = slice(1, None)
    return low, values[tuple(at)]
