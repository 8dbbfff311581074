"""Gate: the sampled fields do not fold."""

from __future__ import annotations

from typing import Any

import numpy as np

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import ranked, worst_places
from volmap.certify.table import Limit
from volmap.kernels.folds import cube_determinants
from volmap.types.certificate import Gate
from volmap.types.gridfield import GridField


def field_folds(evidence: Evidence, limit: Limit) -> Gate:
    """Count cubes of eight defined voxels where one of ten determinants is not positive, on each field."""
    fields = {"forward": (evidence.forward, "source"), "backward": (evidence.backward, "target")}
    value: dict[str, Any] = {}
    places: list[tuple[float, dict[str, Any]]] = []
    for name, (field, space) in fields.items():
        if field is not None:
            value[name], found = _folds_of(field, space)
            places += found
    cubes = sum(v["cubes"] for v in value.values())
    if cubes == 0:
        return not_assessed(limit, "no field with a cube of eight defined voxels was given")
    count = sum(v["folded"] for v in value.values())
    share = max(100.0 * v["folded"] / v["cubes"] for v in value.values() if v["cubes"])
    if count == 0:
        sentence = f"No fold: all ten determinants are positive in each of the {cubes} cubes of eight voxels."
    else:
        sentence = f"The sampled fields fold in {count} of {cubes} cubes of eight voxels."
    missing = [name for name in fields if name not in value]
    if missing:
        sentence += f" The {missing[0]} field was not given."
    return judged(
        limit,
        {"count": count, "share": share},
        value={"count": count, "share": share} | value,
        sentence=sentence,
        where=ranked(places),
    )


def _folds_of(field: GridField, space: str) -> tuple[dict[str, Any], list[tuple[float, dict[str, Any]]]]:
    smallest = cube_determinants(field.displacement, field.grid.affine)
    defined = np.isfinite(smallest)
    folded = np.argwhere(defined & (smallest <= 0))
    ratios = smallest[tuple(folded.T)]
    value = {
        "cubes": int(defined.sum()),
        "folded": len(folded),
        "smallest": float(smallest[defined].min()) if defined.any() else None,
    }
    found = worst_places(
        field.grid.to_world(folded.astype(np.float64) + 0.5),
        -ratios,
        space=space,
        note=lambda row: f"the field folds here, smallest of ten determinants {ratios[row]:.3g}",
        apart_mm=2 * field.grid.voxel_mm,
    )
    return value, found
