"""Pieces, voids and cavities of label volumes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Box = tuple[slice, slice, slice]
_ALL_AROUND = np.ones((3, 3, 3), bool)
_FACES = ndimage.generate_binary_structure(3, 1)


@dataclass(frozen=True)
class Region:
    """A connected set of voxels.

    Parameters
    ----------
    box : tuple of 3 slices
        Where it lies, with one voxel of margin where the array has it.
    mask : bool array of the box
    voxels : int
    """

    box: Box
    mask: NDArray[np.bool_]
    voxels: int

    @property
    def middle(self) -> NDArray[np.float64]:
        """(3,) mean index of its voxels."""
        corner = np.array([s.start for s in self.box], np.float64)
        return np.asarray(np.argwhere(self.mask).mean(axis=0) + corner)

    def values_around(self, labels: NDArray[Any]) -> NDArray[Any]:
        """Values of the neighbours its outer faces lie against, one a face."""
        around, padded = np.pad(labels[self.box], 1), np.pad(self.mask, 1)
        beside = []
        for axis in range(3):
            for step in (-1, 1):
                shifted = np.roll(padded, step, axis)
                beside.append(around[shifted & ~padded])
        return np.concatenate(beside)


def body_box(labels: NDArray[Any], margin: int = 0) -> Box:
    """The box of all voxels above 0, with a margin where the array has room."""
    box = []
    above = labels > 0
    for axis in range(3):
        others = tuple(a for a in range(3) if a != axis)
        held = np.flatnonzero(above.any(axis=others))
        box.append(slice(max(0, held[0] - margin), min(labels.shape[axis], held[-1] + 1 + margin)))
    return box[0], box[1], box[2]


def pieces(mask: NDArray[np.bool_]) -> tuple[NDArray[np.int32], NDArray[np.int64]]:
    """Number the 6-connected pieces of a set from 1; their voxel counts, in that order."""
    numbered, n = ndimage.label(mask, _FACES)
    return numbered, np.bincount(numbered.ravel(), minlength=n + 1)[1:]


def count_touching(mask: NDArray[np.bool_]) -> int:
    """Pieces when contact through an edge or a corner also joins (26-connected)."""
    return int(ndimage.label(mask, _ALL_AROUND)[1])


def enclosed(empty: NDArray[np.bool_]) -> list[Region]:
    """26-connected regions of a set that do not reach the outside of the array, largest first.

    Parameters
    ----------
    empty : (I, J, K) bool
        Everything beyond the array counts as empty too.
    """
    numbered, n = ndimage.label(np.pad(empty, 1, constant_values=True), _ALL_AROUND)
    if n <= 1:
        return []
    outside = int(numbered[0, 0, 0])
    numbered = numbered[1:-1, 1:-1, 1:-1]
    return regions_of(numbered, [k for k in range(1, n + 1) if k != outside])


def regions_of(numbered: NDArray[np.int32], wanted: list[int]) -> list[Region]:
    """The numbered sets as regions, largest first, then by place."""
    boxes = ndimage.find_objects(numbered)
    found = []
    for k in wanted:
        box = tuple(
            slice(max(0, s.start - 1), min(n, s.stop + 1))
            for s, n in zip(boxes[k - 1], numbered.shape, strict=True)
        )
        mask = numbered[box] == k
        found.append(Region((box[0], box[1], box[2]), mask, int(np.count_nonzero(mask))))
    return sorted(found, key=lambda r: -r.voxels)


def most_common(values: NDArray[Any]) -> int:
    """The value that occurs most; the smallest of several."""
    return int(np.bincount(values.astype(np.int64)).argmax())
