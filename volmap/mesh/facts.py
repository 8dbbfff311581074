"""What the voxels of each label say, to hold the mesh against."""

from __future__ import annotations

from volmap.mesh.prepare import Prepared, Targets
from volmap.mesh.quality import VoxelFacts


def voxel_facts(prepared: Prepared, targets: Targets) -> dict[int, VoxelFacts]:
    """Facts for each label above 0, by its number in the volume; volumes in world mm3."""
    scale = prepared.grid.voxel_mm3 / prepared.voxel_volume
    facts = {}
    for k, shape in enumerate(prepared.shapes, start=1):
        facts[int(prepared.label_ids[k])] = VoxelFacts(
            volume_mm3=float(targets.volume_mm3[k] + targets.specks_mm3[k]) * scale,
            specks_mm3=float(targets.specks_mm3[k]) * scale,
            pieces=int(targets.pieces[k]),
            euler=shape.euler,
            thin=shape.thin,
        )
    return facts
