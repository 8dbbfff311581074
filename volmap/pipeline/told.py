"""What is told about a map beside it: sidecars, scans, mesh, distortion.

Made once when a map is made, and again from the files when a folder is checked.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap import carry as carrying
from volmap.kernels.distortion import energies
from volmap.kernels.energies import ENERGIES
from volmap.kernels.tets import dihedral_degrees, shape_gradients
from volmap.types import GridField, LabelVolume, TetMesh, VolumeMap


def sidecars_of(
    volume_map: VolumeMap, source: LabelVolume, target: LabelVolume, forward: GridField, backward: GridField
) -> dict[str, dict[str, Any]]:
    """The sidecars of both fields: 'forward' and 'backward'."""
    return {
        "forward": carrying.field_sidecar(
            forward,
            volume_map,
            direction="forward",
            grid_sha256=source.sha256,
            points_into_sha256=target.sha256,
            points_into_grid=target.grid,
            paired_file="backward.nii.gz",
            paired=carrying.round_trip(forward, backward),
        ),
        "backward": carrying.field_sidecar(
            backward,
            volume_map,
            direction="backward",
            grid_sha256=target.sha256,
            points_into_sha256=source.sha256,
            points_into_grid=source.grid,
            paired_file="forward.nii.gz",
            paired=carrying.round_trip(backward, forward),
        ),
    }


def distortion_of(volume_map: VolumeMap, energy: str) -> NDArray[np.float64]:
    """(m,) W_S of each tet of the map as it is handed out."""
    points, images = np.array(volume_map.mesh.points), np.array(volume_map.images)
    tets = np.array(volume_map.mesh.tets)
    out = np.empty(len(tets))
    energies(ENERGIES[energy], images, tets, shape_gradients(points, tets), out)
    return out


def scan_document(volume: LabelVolume) -> dict[str, Any]:
    """What a certificate says of a scan."""
    counts = np.bincount(volume.labels.ravel())
    return {
        "name": volume.name,
        "sha256": volume.sha256,
        "shape": list(volume.grid.shape),
        "spacing_mm": volume.grid.spacing.tolist(),
        "labels": {
            str(label): {
                "name": volume.name_of(label),
                "voxels": int(counts[label]),
                "volume_mm3": float(counts[label] * volume.grid.voxel_mm3),
            }
            | ({"codes": volume.codes[label].as_dict()} if label in volume.codes else {})
            for label in volume.present
        },
    }


def mesh_document(mesh: TetMesh, scan: Mapping[str, Any], *, side: str) -> dict[str, Any]:
    """What a certificate says of the mesh a pair was solved on: that of `side`, with its `scan_document`."""
    voxels = {int(k): v["volume_mm3"] for k, v in scan["labels"].items()}
    return {
        "of": side,
        "points": len(mesh.points),
        "tets": len(mesh.tets),
        "min_dihedral_deg": float(dihedral_degrees(mesh.points, mesh.tets).min()),
        "volume_error_pct": {str(k): 100.0 * (mesh.volume_of(k) / v - 1.0) for k, v in voxels.items()},
    }
