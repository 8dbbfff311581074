"""What the voxels of each label are like, whatever the edge of a mesh: pieces, Euler number, thinness."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.mesh.euler import euler_of_voxels

DEEP = 2.0  # voxels from the outside
DEEP_SHARE = 0.05  # of the voxels that must be deep for a label not to be thin


@dataclass(frozen=True, eq=False)
class LabelShape:
    """The voxels of one label.

    Attributes
    ----------
    piece_voxels : (n_pieces,) int64
        Voxels of each 6-connected piece.
    euler : int
        6-connected.
    thin : bool
        True when hardly any voxel is two voxels away from the outside.
    """

    piece_voxels: NDArray[np.int64]
    euler: int
    thin: bool


def is_thin(inside: NDArray[np.bool_]) -> bool:
    """True when hardly any voxel is two voxels away from the outside (a slab of three has a third of its)."""
    depth = ndimage.distance_transform_edt(np.pad(inside, 1))
    return bool((depth >= DEEP).sum() < DEEP_SHARE * inside.sum())


def label_shapes(labels: NDArray[np.uint16]) -> tuple[LabelShape, ...]:
    """Shapes of the labels 1, 2, ... of an array that has no gaps between its labels."""
    shapes = []
    for k, box in enumerate(ndimage.find_objects(labels), start=1):
        inside = labels[box] == k
        pieces = np.bincount(ndimage.label(inside)[0].ravel())[1:]
        shapes.append(LabelShape(pieces, euler_of_voxels(inside), is_thin(inside)))
    return tuple(shapes)
