"""Gate: the map against the same pair solved on the other body's mesh."""

from __future__ import annotations

import numpy as np

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import ranked, worst_places
from volmap.certify.statistics import summary
from volmap.certify.table import Limit
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.types.certificate import Gate


def order_difference(evidence: Evidence, limit: Limit) -> Gate:
    """How far ``other(map(x))`` is from x: mean over volume, largest also over mesh points.

    Only places whose image lies in the other mesh are measured; their share is the coverage.
    """
    voxel_mm = evidence.voxel_mm
    if evidence.other is None:
        return not_assessed(limit, "the pair was not solved on the other mesh", voxel_mm=voxel_mm)
    mesh, other = evidence.map.mesh, evidence.other
    starts = np.concatenate([mesh.points[mesh.tets].mean(axis=1), mesh.points])
    ends = np.concatenate([evidence.map.images[mesh.tets].mean(axis=1), evidence.map.images])
    weights = np.concatenate([np.abs(mesh.volumes), np.zeros(len(mesh.points))])
    tet, where_in = locate(
        build_buckets(other.mesh.points, other.mesh.tets), other.mesh.points, other.mesh.tets, ends
    )
    known = tet >= 0
    if not weights[known].sum() > 0:
        return not_assessed(limit, "no image lies in the other mesh", voxel_mm=voxel_mm)
    back = interpolate(other.mesh.tets, other.images, tet[known], where_in[known])
    error = np.linalg.norm(back - starts[known], axis=1)
    value = summary(error, weights[known])
    value |= {
        "mean_voxels": value["mean"] / voxel_mm,
        "coverage": float(weights[known].sum() / weights.sum()),
    }
    sentence = (
        f"Solved on the other mesh the map differs by {value['mean']:.3f} mm on average "
        f"({value['mean_voxels']:.2f} voxel), 95 % within {value['p95']:.2f} mm, "
        f"largest {value['max']:.2f} mm, "
        f"measured over {100 * value['coverage']:.1f} % of the volume."
    )
    places = worst_places(
        starts[known],
        error,
        space="source",
        note=lambda row: f"the two orders differ by {error[row]:.3f} mm",
        apart_mm=4 * voxel_mm,
    )
    return judged(limit, value, value=value, sentence=sentence, voxel_mm=voxel_mm, where=ranked(places))
