"""Meshes and surfaces through a map, with or without data: points exactly, each quantity by its own rule."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from volmap.carry.measured import carried_quantity, lost_values, quantity_facts
from volmap.carry.points import MovedPoints, move_points
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.things import Carried, carry
from volmap.types import (
    Finding,
    Grid,
    InputError,
    Level,
    MapChain,
    MeshFields,
    Quantity,
    Rule,
    Surface,
    TetMesh,
    VolumeMap,
)

Findings = tuple[Finding, ...]


@carry.register(TetMesh)
@carry.register(Surface)
def _carry_body(
    thing: TetMesh | Surface,
    volume_map: VolumeMap | MapChain,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    carried = carry(MeshFields(thing), volume_map, reverse=reverse, settings=settings)
    return Carried(carried.thing.body, carried.findings)


@carry.register
def _carry_mesh_fields(
    thing: MeshFields,
    volume_map: VolumeMap | MapChain,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    """Quantities at cells take the gradient at the middle of each cell."""
    directed = volume_map.reversed() if reverse else volume_map
    where = "mesh" if isinstance(thing.body, TetMesh) else "surface"
    moved, findings = _all_carried(thing.points, directed, where, settings.reach)
    body, turned = moved_body(thing.body, moved.points)
    at_points, lost_there = _carried(thing.at_points, directed, moved)
    at_cells: tuple[Quantity, ...] = thing.at_cells
    lost_here: Findings = ()
    if any(q.rule is not Rule.VALUE for q in thing.at_cells):
        middles = thing.points[thing.cells].mean(axis=1)
        at_cells, lost_here = _carried(at_cells, directed, move_points(directed, middles, reach_mm=np.inf))
    fields = replace(thing, body=body, at_points=at_points, at_cells=at_cells)
    facts = quantity_facts((*thing.at_points, *thing.at_cells))
    return Carried(fields, findings + turned + lost_there + lost_here, facts)


def _carried(
    quantities: tuple[Quantity, ...], volume_map: VolumeMap | MapChain, moved: MovedPoints
) -> tuple[tuple[Quantity, ...], Findings]:
    carried = tuple(carried_quantity(q, volume_map, moved) for q in quantities)
    lost = [lost_values(a, b, moved) for a, b in zip(quantities, carried, strict=True)]
    return carried, tuple(finding for findings in lost for finding in findings)


def moved_body(body: TetMesh | Surface, points: NDArray[np.float64]) -> tuple[TetMesh | Surface, Findings]:
    """The body with its points elsewhere, and which of its tets turned over."""
    if isinstance(body, Surface):
        return Surface(points, body.triangles, body.sides), ()
    mesh = body.moved(points)
    turned = int(((mesh.volumes <= 0) & (body.volumes > 0)).sum())
    if not turned:
        return mesh, ()
    sentence = f"{turned} of {len(mesh.tets)} tets turned inside out: they are larger than the map's bends"
    remedy = "refine the mesh before carrying it"
    return mesh, (Finding(Level.WARN, "turned-tets", "mesh", sentence, remedy),)


def _all_carried(
    points: NDArray[np.float64], volume_map: VolumeMap | MapChain, where: str, reach_mm: float
) -> tuple[MovedPoints, Findings]:
    """Every point carried, or the whole thing refused."""
    moved = move_points(volume_map, points, reach_mm=reach_mm)
    lost = ~moved.carried
    if lost.any():
        raise InputError(
            "points lie outside the body",
            where=where,
            found=f"{lost.sum()} of {len(points)} points, up to {moved.outside_mm.max():.2f} mm outside",
            expected=f"at most {reach_mm:g} mm",
            remedy="check that it belongs to this scan, cut it to the body, or allow a larger reach",
            refused=True,
        )
    n_outside = int(moved.extrapolated.sum())
    if not n_outside:
        return moved, ()
    sentence = (
        f"{n_outside} of {len(points)} points lie up to {moved.outside_mm.max():.2f} mm outside the body "
        "and were carried with the affine map of the nearest tet, not measured"
    )
    return moved, (Finding(Level.WARN, "outside-carried", where, sentence),)
