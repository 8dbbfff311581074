"""Gate: how far the map leaves a boundary correspondence it was given, and where that crushes the volume."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import MOST, worst_places
from volmap.certify.surface_faults import SurfaceFaults, surface_faults
from volmap.certify.table import Limit
from volmap.kernels.closest import build_tree, closest
from volmap.kernels.statistics import summary
from volmap.kernels.surface_map import Spoken
from volmap.types.certificate import Gate
from volmap.types.given_boundary import GivenBoundary
from volmap.types.volume_map import VolumeMap

Floats = NDArray[np.float64]
Place = tuple[float, dict[str, Any]]

PINCHED = 4.0  # stretches that differ from the usual by this factor are a place where distortion gathers


def given_boundary(evidence: Evidence, limit: Limit) -> Gate:
    """Deviations at the boundary points of the mesh the pair was solved on, in the other world.

    Beside them: the file's own faults, and the deviations at the file's own points in TARGET, which hold the
    distance between its surface and the body's too.
    """
    voxel_mm, given = evidence.voxel_mm, evidence.given
    if given is None:
        return not_assessed(limit, "no boundary was given", voxel_mm=voxel_mm)
    turned = evidence.solved_on == "target"
    here = evidence.map.reversed() if turned else evidence.map
    spoken = (given.reversed() if turned else given).spoken_of(here.mesh.interfaces)
    if not len(spoken.rows):
        return not_assessed(limit, "the given boundary speaks of no part of the body's", voxel_mm=voxel_mm)
    deviation = np.linalg.norm(here.images[spoken.rows] - spoken.anchors, axis=1)
    spread = summary(deviation, spoken.area)
    statistics = {k: spread[k] for k in ("mean", "p95", "max")} | {
        "excess": max(0.0, spread["max"] - given.tolerance_mm)
    }
    faults = surface_faults(given)
    coverage = _coverage(here, spoken)
    value: dict[str, Any] = spread | {
        "excess": statistics["excess"],
        "tolerance_mm": given.tolerance_mm,
        "coverage": coverage,
        "surface_gap_mm": float((spoken.gap_mm * spoken.area).sum() / spoken.area.sum()),
        "at_file_points": _at_file_points(evidence.map, given),
        "faults": {"folds": len(faults.folds), "tears": len(faults.tears), "crushed": len(faults.crushed)},
        "giving_way": [asdict(row) | {"where_mm": list(row.where_mm)} for row in evidence.giving_way],
    }
    where = _places(evidence.map, here, spoken, deviation, faults, given, apart_mm=4 * voxel_mm)
    return judged(
        limit,
        statistics,
        value=value,
        sentence=_sentence(value, faults, deviation, given),
        voxel_mm=voxel_mm,
        where=where,
    )


def _coverage(here: VolumeMap, spoken: Spoken) -> float:
    """Share of the outer boundary's area that the surface speaks of."""
    surface = here.mesh.interfaces
    p = surface.points[surface.triangles]
    area = np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1)
    area[surface.sides[:, 1] != 0] = 0.0
    return float(area[spoken.covered].sum() / area.sum())


def _at_file_points(volume_map: VolumeMap, given: GivenBoundary) -> dict[str, float]:
    """What a user measures: each point of the file, through the nearest point of the boundary, in TARGET."""
    surface = volume_map.mesh.interfaces
    points, triangles = np.array(surface.points), np.array(surface.triangles)
    queries = np.array(given.points)
    t, barycentric, squared = closest(build_tree(points, triangles), points, triangles, queries)
    near = squared <= given.reach_mm**2
    landed = np.einsum("qk,qkd->qd", barycentric, volume_map.images[triangles[t]])
    apart = np.linalg.norm(landed - given.images, axis=1)[near]
    if not len(apart):
        return {}
    spread = summary(apart, np.ones(len(apart)))
    return {k: spread[k] for k in ("mean", "p95", "max")}


def _places(
    volume_map: VolumeMap,
    here: VolumeMap,
    spoken: Spoken,
    deviation: Floats,
    faults: SurfaceFaults,
    given: GivenBoundary,
    *,
    apart_mm: float,
) -> list[dict[str, Any]]:
    """Where the map gives way beyond the tolerance, where the file is at fault, where distortion gathers."""
    at = (here.images if volume_map.mesh is not here.mesh else here.mesh.points)[spoken.rows]
    beyond = np.flatnonzero(deviation > given.tolerance_mm)
    found = worst_places(
        at[beyond],
        deviation[beyond],
        space="source",
        note=lambda i: f"the map gives way by {deviation[beyond[i]]:.3f} mm",
        apart_mm=apart_mm,
    )
    own = [
        *_noted(
            faults.folds, faults.turned_deg, "the given surface map folds over, by {:.0f} degrees", apart_mm
        ),
        *_noted(faults.tears, faults.torn_mm, "the given surface map tears, by {:.2f} mm", apart_mm),
        *_noted(
            faults.crushed, 1 - faults.shrunk, "the given surface map crushes {:.1%} of its area", apart_mm
        ),
    ]
    gathered = _gathered(volume_map, here, spoken, apart_mm)
    third = MOST // 3
    lists = [found, own, gathered]
    kept = [x[:third] for x in lists]
    left = MOST - sum(map(len, kept))
    for taken, x in zip(kept, lists, strict=True):
        more = x[third : third + left]
        taken += more
        left -= len(more)
    return [p for taken in kept for _, p in taken]


def _noted(points: Floats, amounts: Floats, words: str, apart_mm: float) -> list[Place]:
    return worst_places(
        points, amounts, space="source", note=lambda i: words.format(amounts[i]), apart_mm=apart_mm
    )


def _gathered(volume_map: VolumeMap, here: VolumeMap, spoken: Spoken, apart_mm: float) -> list[Place]:
    """Tets at the boundary spoken of whose stretches are far from the usual."""
    touched = np.zeros(len(here.mesh.points), bool)
    touched[spoken.rows] = True
    stretches, ratio = volume_map.stretches, volume_map.volume_ratio
    usual = np.median(stretches, axis=0)
    excess = np.maximum(stretches[:, 0] / usual[0], usual[2] / np.maximum(stretches[:, 2], 1e-300))
    rows = np.flatnonzero(touched[volume_map.mesh.tets].any(axis=1) & (excess >= PINCHED))
    centres = volume_map.mesh.points[volume_map.mesh.tets[rows]].mean(axis=1)

    def note(i: int) -> str:
        least, most = stretches[rows[i], 2], stretches[rows[i], 0]
        return f"distortion gathers: stretches from {least:.3g} to {most:.3g}, J {ratio[rows[i]]:.3g}"

    return worst_places(centres, excess[rows], space="source", note=note, apart_mm=apart_mm)


def _sentence(value: dict[str, Any], faults: SurfaceFaults, deviation: Floats, given: GivenBoundary) -> str:
    outside = int((deviation > given.tolerance_mm).sum())
    sentence = (
        f"The given boundary covers {100 * value['coverage']:.0f} % of the body's; there the map leaves "
        f"it by {value['mean']:.3f} mm on average and by {value['max']:.3f} mm at most, with "
        f"{given.tolerance_mm:.3g} mm allowed."
    )
    if outside:
        sentence += (
            f" {outside} of {len(deviation)} boundary points lie beyond that: keeping them would "
            "crush or invert tets."
        )
    own = [
        f"{count} {word}"
        for count, word in (
            (len(faults.folds), "folded edges"),
            (len(faults.tears), "torn points"),
            (len(faults.crushed), "crushed triangles"),
        )
        if count
    ]
    return sentence + (f" The given surface map itself has {', '.join(own)}." if own else "")
