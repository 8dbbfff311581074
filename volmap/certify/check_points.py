"""Gate: landmarks that did not steer the map."""

from __future__ import annotations

from typing import Any

import numpy as np

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import MOST, place
from volmap.certify.table import Limit
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.statistics import summary
from volmap.types.certificate import Gate


def check_points(evidence: Evidence, limit: Limit) -> Gate:
    """How far check points land from their partners; each is carried by its own tet, exactly."""
    voxel_mm = evidence.voxel_mm
    if evidence.checks is None or "check" not in evidence.checks.roles:
        return not_assessed(limit, "no check points were given", voxel_mm=voxel_mm)
    checks = evidence.checks.of_role("check")
    mesh = evidence.map.mesh
    tet, where_in = locate(build_buckets(mesh.points, mesh.tets), mesh.points, mesh.tets, checks.points)
    inside = np.flatnonzero(tet >= 0)
    outside = [checks.names[row] for row in np.flatnonzero(tet < 0)]
    if not len(inside):
        return not_assessed(limit, "every check point lies outside the mesh", voxel_mm=voxel_mm)
    landed = interpolate(mesh.tets, evidence.map.images, tet[inside], where_in[inside])
    error = np.linalg.norm(landed - checks.to_points[inside], axis=1)
    names = [checks.names[row] for row in inside]
    value: dict[str, Any] = summary(error, np.ones(len(error)))
    value |= {
        "points": len(error),
        "outside": outside,
        "per_point": {n: float(e) for n, e in zip(names, error, strict=True)},
    }
    sentence = (
        f"{len(error)} independent check points land {value['mean']:.2f} mm from their partners on average, "
        f"95 % within {value['p95']:.2f} mm, the worst {value['max']:.2f} mm away."
    )
    if outside:
        sentence += f" {len(outside)} lie outside the mesh and were not measured."
    worst = np.argsort(-error, kind="stable")[:MOST]
    where = [
        place(checks.points[inside[w]], "source", f"check point {names[w]}: {error[w]:.3f} mm away")
        for w in worst
    ]
    return judged(limit, value, value=value, sentence=sentence, voxel_mm=voxel_mm, where=where)
