"""What was measured beside the gates."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.statistics import weighted_mean, weighted_quantile
from volmap.kernels.tets import signed_volumes
from volmap.types.volume_map import VolumeMap


def spread(values: NDArray[np.float64], weights: NDArray[np.float64]) -> dict[str, float]:
    """Mean, smallest, quantiles and largest, weighted."""
    return {
        "mean": weighted_mean(values, weights),
        "min": float(values.min()),
        "p5": weighted_quantile(values, weights, 0.05),
        "p50": weighted_quantile(values, weights, 0.5),
        "p95": weighted_quantile(values, weights, 0.95),
        "max": float(values.max()),
    }


def measures(volume_map: VolumeMap) -> dict[str, Any]:
    """Volume ratio per label, principal stretches and displacement, weighted by volume in SOURCE.

    Returns
    -------
    dict
        Plain values.  Tets of the mesh without positive volume are left out.
    """
    mesh = volume_map.mesh
    before, after = mesh.volumes, signed_volumes(volume_map.images, mesh.tets)
    good = before > 0
    centres = (volume_map.images - mesh.points)[mesh.tets[good]].mean(axis=1)
    found: dict[str, Any] = {
        "volume_ratio": spread(after[good] / before[good], before[good]),
        "displacement_mm": spread(np.linalg.norm(centres, axis=1), before[good]),
        "volume_ratio_per_label": {},
        "volume_mm3_per_label": {},
    }
    if good.all():
        stretches = volume_map.stretches
        found["largest_stretch"] = spread(stretches[:, 0], before)
        found["smallest_stretch"] = spread(stretches[:, 2], before)
    for label in mesh.present:
        own = good & (mesh.labels == label)
        if own.any():
            found["volume_ratio_per_label"][str(label)] = spread(after[own] / before[own], before[own])
            found["volume_mm3_per_label"][str(label)] = {
                "source": float(before[own].sum()),
                "target": float(after[own].sum()),
            }
    return found
