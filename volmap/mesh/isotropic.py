"""Cutting long voxels by shape-based interpolation, never by interpolating labels.

The signed distance of each label is interpolated between slices and the largest one wins (Raya & Udupa 1990).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

LONGEST_RATIO = 1.6  # longer voxels than this are cut
MOST_PARTS = 4
MARGIN = 3  # voxels around a label for which its distance is worked out

Labels = NDArray[np.uint16]


def subdivision(spacing: NDArray[np.float64]) -> NDArray[np.int64]:
    """(3,) parts to cut each voxel into along each axis."""
    ratio = spacing / spacing.min()
    parts = np.minimum(MOST_PARTS, np.rint(ratio).astype(np.int64))
    return np.where(ratio > LONGEST_RATIO, parts, 1)


def signed_distance(inside: NDArray[np.bool_], spacing: NDArray[np.float64]) -> NDArray[np.float32]:
    """Distance in mm to the nearest voxel of the other kind, positive inside, as if edge voxels went on."""
    if inside.all():
        return np.full(inside.shape, 1e3, np.float32)
    padded = np.pad(inside, 1, mode="edge")
    distance = ndimage.distance_transform_edt(padded, sampling=spacing)
    distance -= ndimage.distance_transform_edt(~padded, sampling=spacing)
    return np.asarray(distance[1:-1, 1:-1, 1:-1], np.float32)


def stretched(values: NDArray[np.float32], axis: int, parts: int) -> NDArray[np.float32]:
    """Linear interpolation at the centres of the parts each voxel is cut into along one axis."""
    n = values.shape[axis]
    centres = np.clip((np.arange(n * parts) + 0.5) / parts - 0.5, 0, n - 1)
    below = np.minimum(centres.astype(np.int64), max(n - 2, 0))
    shape = [1, 1, 1]
    shape[axis] = -1
    weight = (centres - below).astype(np.float32).reshape(shape)
    above = np.minimum(below + 1, n - 1)
    return np.asarray(np.take(values, below, axis) * (1 - weight) + np.take(values, above, axis) * weight)


def _box_of(inside: NDArray[np.bool_], whole: bool) -> tuple[slice, ...]:
    """Bounding box of a label with a margin; the whole array when asked."""
    if whole:
        return tuple(slice(0, n) for n in inside.shape)
    box = ndimage.find_objects(inside.astype(np.uint8))[0]
    return tuple(
        slice(max(0, b.start - MARGIN), min(n, b.stop + MARGIN))
        for b, n in zip(box, inside.shape, strict=True)
    )


def subdivided(labels: Labels, spacing: NDArray[np.float64], parts: NDArray[np.int64]) -> Labels:
    """The label volume with each voxel cut into ``parts`` along the three axes.

    Parameters
    ----------
    labels : (I, J, K) uint16
    spacing : (3,) float64, mm
    parts : (3,) int64

    Returns
    -------
    (I * parts[0], ...) uint16
    """
    if (parts == 1).all():
        return labels
    shape = tuple(int(n * k) for n, k in zip(labels.shape, parts, strict=True))
    best, winner = np.full(shape, -1e9, np.float32), np.zeros(shape, np.uint16)
    for label in np.unique(labels):
        inside = labels == label
        box = _box_of(inside, bool(label == 0))
        distance = signed_distance(inside[box], spacing)
        for axis in range(3):
            if parts[axis] > 1:
                distance = stretched(distance, axis, int(parts[axis]))
        fine = tuple(slice(b.start * int(k), b.stop * int(k)) for b, k in zip(box, parts, strict=True))
        better = distance > best[fine]
        best[fine][better] = distance[better]
        winner[fine][better] = label
    return winner
