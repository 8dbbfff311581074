"""Gate: the map against the same pair solved on the other body's mesh."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import ranked, worst_places
from volmap.certify.table import Limit
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.statistics import summary
from volmap.types.certificate import Gate
from volmap.types.volume_map import VolumeMap

Floats = NDArray[np.float64]


def order_difference(evidence: Evidence, limit: Limit) -> Gate:
    """How far ``other(map(x))`` is from x: mean over volume, largest also over mesh points.

    Only places whose image lies in the other mesh are measured; their share is the coverage.  When the two
    solves were drawn together, the same is measured on the solves as they were before: drawn together they
    are no longer independent of each other.
    """
    voxel_mm = evidence.voxel_mm
    if evidence.other is None:
        return not_assessed(limit, "the pair was not solved on the other mesh", voxel_mm=voxel_mm)
    starts, error, value = _difference(evidence.map, evidence.other, voxel_mm)
    if not value:
        return not_assessed(limit, "no image lies in the other mesh", voxel_mm=voxel_mm)
    sentence = (
        f"Solved on the other mesh the map differs by {_told(value)}, "
        f"measured over {100 * value['coverage']:.1f} % of the volume."
    )
    statistics = dict(value)
    if evidence.alone is not None:
        _, _, before = _difference(*evidence.alone, voxel_mm)
        value["alone"] = before or None
        statistics |= {f"alone_{key}": before[key] for key in ("mean", "p95", "max") if before}
        sentence += (
            " The two solves were drawn together, so this says how nearly they are one map and its inverse, "
            "not how well it is known."
        )
        if before:
            sentence += (
                f" Each on its own they differed by {_told(before)}: an independent measure of how much "
                "the answer depends on the mesh."
            )
    places = worst_places(
        starts,
        error,
        space="source",
        note=lambda row: f"the two orders differ by {error[row]:.3f} mm",
        apart_mm=4 * voxel_mm,
    )
    return judged(limit, statistics, value=value, sentence=sentence, voxel_mm=voxel_mm, where=ranked(places))


def _told(value: dict[str, Any]) -> str:
    return (
        f"{value['mean']:.3f} mm on average ({value['mean_voxels']:.2f} voxel), "
        f"95 % within {value['p95']:.2f} mm, largest {value['max']:.2f} mm"
    )


def _difference(here: VolumeMap, there: VolumeMap, voxel_mm: float) -> tuple[Floats, Floats, dict[str, Any]]:
    """Starting points (k, 3), ``|there(here(x)) - x|`` (k,), both in mm, and the gate's value.

    The value is empty when no image lies in the other mesh.
    """
    mesh = here.mesh
    starts = np.concatenate([mesh.points[mesh.tets].mean(axis=1), mesh.points])
    ends = np.concatenate([here.images[mesh.tets].mean(axis=1), here.images])
    weights = np.concatenate([np.abs(mesh.volumes), np.zeros(len(mesh.points))])
    buckets = build_buckets(there.mesh.points, there.mesh.tets)
    tet, where_in = locate(buckets, there.mesh.points, there.mesh.tets, ends)
    known = tet >= 0
    if not weights[known].sum() > 0:
        return starts[:0], np.zeros(0), {}
    back = interpolate(there.mesh.tets, there.images, tet[known], where_in[known])
    error = np.linalg.norm(back - starts[known], axis=1)
    value: dict[str, Any] = summary(error, weights[known])
    value |= {
        "mean_voxels": value["mean"] / voxel_mm,
        "coverage": float(weights[known].sum() / weights.sum()),
    }
    return starts[known], error, value
