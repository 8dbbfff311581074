"""Gate: how much single tets grow and shrink."""

from __future__ import annotations

import numpy as np

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged
from volmap.certify.places import ranked, worst_places
from volmap.certify.table import Limit
from volmap.kernels.statistics import weighted_quantile
from volmap.kernels.tets import signed_volumes
from volmap.types.certificate import Gate


def volume_ratio(evidence: Evidence, limit: Limit) -> Gate:
    """Range of J = image volume over volume, weighted by volume in SOURCE."""
    mesh = evidence.map.mesh
    before, after = mesh.volumes, signed_volumes(evidence.map.images, mesh.tets)
    measurable = before > 0
    if not measurable.any():
        raise ValueError("a mesh without a positive tet has no volume ratio")
    ratio, weights = after[measurable] / before[measurable], before[measurable]
    value = {
        "min": float(ratio.min()),
        "p0_1": weighted_quantile(ratio, weights, 0.001),
        "p50": weighted_quantile(ratio, weights, 0.5),
        "p99_9": weighted_quantile(ratio, weights, 0.999),
        "max": float(ratio.max()),
        "overall": float(after.sum() / before.sum()),
    }
    sentence = (
        f"Volume ratios lie between {value['min']:.3g} and {value['max']:.3g}; 99.8 % of the volume between "
        f"{value['p0_1']:.3g} and {value['p99_9']:.3g}."
    )
    strength = np.abs(np.log(np.maximum(ratio, 1e-12)))
    centres = mesh.points[mesh.tets[measurable]].mean(axis=1)
    worst = worst_places(
        centres,
        strength,
        space="source",
        note=lambda row: f"volume ratio {ratio[row]:.3g}",
        apart_mm=4 * evidence.voxel_mm,
    )
    return judged(limit, value, value=value, sentence=sentence, where=ranked(worst))
