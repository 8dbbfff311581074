"""Measurements through a map: places move exactly, numbers by the rule that was said for each."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from volmap.carry.outside import outside_findings
from volmap.carry.points import MovedPoints, carried_values, move_points
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.things import Carried, carry
from volmap.types import Finding, Grid, Level, MapChain, Measurements, Quantity, VolumeMap


@carry.register
def _carry_measurements(
    thing: Measurements,
    volume_map: VolumeMap | MapChain,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed = volume_map.reversed() if reverse else volume_map
    moved = move_points(directed, thing.points, reach_mm=settings.reach)
    quantities = tuple(carried_quantity(q, directed, moved) for q in thing.quantities)
    kept = np.flatnonzero(moved.carried)
    there = thing if moved.carried.all() else thing.rows(kept)
    measured = replace(
        there,
        points=moved.points[kept],
        quantities=tuple(q.with_values(q.values[kept]) for q in quantities),
    )
    findings = outside_findings(moved, thing.names, "measurements")
    for before, after in zip(thing.quantities, quantities, strict=True):
        findings += lost_values(before, after, moved)
    return Carried(measured, findings, quantity_facts(thing.quantities))


def carried_quantity(quantity: Quantity, volume_map: VolumeMap | MapChain, moved: MovedPoints) -> Quantity:
    """A quantity at moved points, by its own rule; NaN where a point was not carried."""
    return quantity.with_values(carried_values(quantity.rule, quantity.values, volume_map, moved))


def lost_values(before: Quantity, after: Quantity, moved: MovedPoints) -> tuple[Finding, ...]:
    """Values that were there and have no answer though their place has: the map is inside out there."""
    n = len(before.values)
    known = ~np.isnan(before.values.reshape(n, -1)).any(axis=1)
    lost = known & moved.carried & np.isnan(after.values.reshape(n, -1)).any(axis=1)
    if not lost.any():
        return ()
    sentence = f"{lost.sum()} of {n} values lie in tets that the map turns inside out and have no answer"
    remedy = "see the gate inverted_tets of the map"
    return (Finding(Level.WARN, "no-answer", before.name, sentence, remedy),)


def quantity_facts(quantities: tuple[Quantity, ...]) -> dict[str, Any]:
    """What was done to the numbers, for the document beside the output."""
    return {
        "quantities": [
            {"name": q.name, "unit": q.unit, "rule": q.rule.value, "meaning": q.rule.sentence(q.rank)}
            for q in quantities
        ]
    }
