"""Gate: forward field, then backward field, and the other way round."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import ranked, worst_places
from volmap.certify.statistics import summary
from volmap.certify.table import Limit
from volmap.kernels.there_and_back import round_trip_errors
from volmap.types.certificate import Gate
from volmap.types.gridfield import GridField


def there_and_back(
    first: GridField, second: GridField
) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
    """Where the voxel centres of `first` come back to through both fields.

    Returns
    -------
    points : (n, 3) float64, mm
        Voxel centres for which both fields are defined.
    error_mm : (n,) float64
        How far from itself each comes back.
    defined : int
        Voxel centres for which `first` is defined.
    """
    error = round_trip_errors(first.displacement, first.grid.affine, second.displacement, second.grid.affine)
    known = np.isfinite(error)
    points = first.grid.to_world(np.argwhere(known).astype(np.float64))
    return points, error[known].astype(np.float64), int(first.support.sum())


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
        points, error, defined = there_and_back(first, second)
        if not len(points):
            return not_assessed(limit, "the two fields have no place in common", voxel_mm=voxel_mm)
        value[name] = summary(error, np.ones(len(error))) | {"coverage": len(points) / defined}
        places += _worst(points, error, space, voxel_mm)
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
