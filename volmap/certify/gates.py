"""All gates, in order."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from volmap.certify.boundary_crossings import boundary_crossings
from volmap.certify.boundary_distance import boundary_distance
from volmap.certify.check_points import check_points
from volmap.certify.evidence import Evidence
from volmap.certify.field_folds import field_folds
from volmap.certify.given_boundary import given_boundary
from volmap.certify.inverted_tets import inverted_tets
from volmap.certify.labels_agree import labels_agree
from volmap.certify.measures import measures
from volmap.certify.order_difference import order_difference
from volmap.certify.overlap import overlap
from volmap.certify.round_trip import round_trip
from volmap.certify.solve_settled import solve_settled
from volmap.certify.table import GateTable, Limit
from volmap.certify.volume_ratio import volume_ratio
from volmap.types.certificate import Gate
from volmap.types.progress import Progress, silent

_AFTER_THE_SIGNS: tuple[tuple[str, Callable[[Evidence, Limit], Gate]], ...] = (
    ("boundary_distance_mm", boundary_distance),
    ("overlap", overlap),
    ("volume_ratio", volume_ratio),
    ("round_trip_mm", round_trip),
    ("order_difference_mm", order_difference),
    ("field_folds", field_folds),
    ("check_points_mm", check_points),
    ("labels_agree", labels_agree),
    ("solve_settled", solve_settled),
)


def certify(
    evidence: Evidence, table: GateTable, *, progress: Progress = silent
) -> tuple[tuple[Gate, ...], dict[str, Any]]:
    """Run every gate on a map.

    Parameters
    ----------
    evidence : Evidence
        What is missing in it makes its gates say "not-assessed"; the gate of a given boundary is only there
        when one was given.
    table : GateTable
    progress : Progress

    Returns
    -------
    gates : tuple of Gate
    measures : dict
        See `volmap.certify.measures`.
    """
    total = len(_AFTER_THE_SIGNS) + 2
    progress("certify", 0, total, "inverted_tets")
    inverted = inverted_tets(evidence, table["inverted_tets"])
    progress("certify", 1, total, "boundary_crossings")
    gates = [inverted, boundary_crossings(evidence, table["boundary_crossings"], inverted=inverted)]
    asked = (("given_boundary_mm", given_boundary),) if evidence.given is not None else ()
    total += len(asked)
    for name, gate in (*_AFTER_THE_SIGNS, *asked):
        progress("certify", len(gates), total, name)
        gates.append(gate(evidence, table[name]))
    progress("certify", total, total)
    return tuple(gates), measures(evidence.map)
