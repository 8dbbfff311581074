"""Gate: forward field, then backward field, and the other way round."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import largest, ranked, worst_places
from volmap.certify.table import Limit
from volmap.kernels.statistics import even_summary
from volmap.kernels.trilinear import homecoming
from volmap.types.certificate import Gate


def round_trip(evidence: Evidence, limit: Limit) -> Gate:
    """How far points come back from where they started, forward then backward and backward then forward."""
    voxel_mm = evidence.voxel_mm
    if evidence.forward is None or evidence.backward is None:
        return not_assessed(limit, "a pair of fields was not given", voxel_mm=voxel_mm)
    orders = {
        "forward_then_backward": (evidence.forward, evidence.backward, "source"),
        "backward_then_forward": (evidence.backward, evidence.forward, "target"),
    }
    value: dict[str, Any] = {}
    places: list[tuple[float, dict[str, Any]]] = []
    for name, (first, second, space) in orders.items():
        to_index = np.asarray(np.linalg.inv(second.grid.affine), np.float64)
        errors = homecoming(first.displacement, second.displacement, first.grid.affine, to_index)
        known = np.flatnonzero(np.isfinite(errors))
        if not len(known):
            return not_assessed(limit, "the two fields have no place in common", voxel_mm=voxel_mm)
        error = errors.ravel()[known].astype(np.float64)
        value[name] = even_summary(error) | {"coverage": len(known) / int(first.support.sum())}
        rows = largest(error)
        voxels = np.stack(np.unravel_index(known[rows], errors.shape), axis=1)
        places += _worst(first.grid.to_world(voxels.astype(np.float64)), error[rows], space, voxel_mm)
    worst = {k: max(value[name][k] for name in orders) for k in ("mean", "p95", "max")}
    sentence = (
        f"Forward and backward field undo each other to {worst['mean']:.4f} mm on average "
        f"({worst['mean'] / voxel_mm:.3f} voxel), 95 % within {worst['p95']:.3f} mm, "
        f"largest {worst['max']:.2f} mm."
    )
    return judged(
        limit, worst, value=worst | value, sentence=sentence, voxel_mm=voxel_mm, where=ranked(places)
    )


def _worst(
    points: NDArray[np.float64], error: NDArray[np.float64], space: str, voxel_mm: float
) -> list[tuple[float, dict[str, Any]]]:
    return worst_places(
        points,
        error,
        space=space,
        note=lambda row: f"comes back {error[row]:.3f} mm away",
        apart_mm=4 * voxel_mm,
    )
