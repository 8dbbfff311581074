"""What the voxels of each label say, to hold the mesh against."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.mesh.euler import euler_of_voxels
from volmap.mesh.prepare import Prepared, Targets
from volmap.mesh.quality import VoxelFacts

DEEP = 2.0  # voxels from the outside
DEEP_SHARE = 0.05  # of the voxels that must be deep for a label not to be thin


def is_thin(inside: NDArray[np.bool_]) -> bool:
    """True when hardly any voxel is two voxels away from the outside (a slab of three has a third of its)."""
    depth = ndimage.distance_transform_edt(np.pad(inside, 1))
    return bool((depth >= DEEP).sum() < DEEP_SHARE * inside.sum())


def voxel_facts(prepared: Prepared, targets: Targets) -> dict[int, VoxelFacts]:
    """Facts for each label above 0, by its number in the volume; volumes in world mm3."""
    scale = prepared.grid.voxel_mm3 / prepared.voxel_volume
    boxes = ndimage.find_objects(prepared.labels)
    facts = {}
    for k, label in enumerate(prepared.label_ids[1:], start=1):
        inside = prepared.labels[boxes[k - 1]] == k
        facts[int(label)] = VoxelFacts(
            volume_mm3=float(targets.volume_mm3[k] + targets.specks_mm3[k]) * scale,
            specks_mm3=float(targets.specks_mm3[k]) * scale,
            pieces=int(targets.pieces[k]),
            euler=euler_of_voxels(inside),
            thin=is_thin(inside),
        )
    return facts
