"""Gate: how far the map's label surfaces lie from the scans' own, both ways, in both worlds."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged
from volmap.certify.places import ranked, worst_places
from volmap.certify.table import Limit
from volmap.kernels.closest import build_tree, closest
from volmap.kernels.statistics import summary
from volmap.types.certificate import Gate
from volmap.types.surface import Surface

# Three points a triangle, exact for quadratic functions (Strang & Fix 1973, from memory).
_QUADRATURE = np.array([[4.0, 1.0, 1.0], [1.0, 4.0, 1.0], [1.0, 1.0, 4.0]]) / 6.0


@dataclass(frozen=True, eq=False)
class Distances:
    """Distances of samples of one surface to another.

    Parameters
    ----------
    points : (n, 3) float64, mm
    distance_mm : (n,) float64
    weights : (n,) float64
        Area a sample stands for, mm2; 0 for the triangles' corners, which count for the largest only.
    """

    points: NDArray[np.float64]
    distance_mm: NDArray[np.float64]
    weights: NDArray[np.float64]

    @property
    def summary(self) -> dict[str, float]:
        """Area-weighted mean, median, 95th percentile, and the largest, mm."""
        return summary(self.distance_mm, self.weights)


def surface_distances(of: Surface, to: Surface) -> Distances:
    """Unsigned distances from quadrature points and corners of one surface to the closest points of another.

    Raises
    ------
    ValueError
        A surface without triangles.
    """
    if not len(of.triangles) or not len(to.triangles):
        raise ValueError("a surface without triangles has no distance")
    points, triangles = np.array(to.points), np.array(to.triangles)
    queries, weights = _samples(of)
    tree = build_tree(points, triangles)
    _, _, squared = closest(tree, points, triangles, queries)
    return Distances(queries, np.sqrt(squared), weights)


def _samples(surface: Surface) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    corners = surface.points[surface.triangles]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    area = np.linalg.norm(cross, axis=1) / 2
    inner = np.einsum("qa,tad->tqd", _QUADRATURE, corners).reshape(-1, 3)
    used = surface.points[np.unique(surface.triangles)]
    weights = np.concatenate([np.repeat(area / 3, 3), np.zeros(len(used))])
    return np.ascontiguousarray(np.concatenate([inner, used])), weights


def boundary_distance(evidence: Evidence, limit: Limit) -> Gate:
    """Distances per label: the image against TARGET's surface and the mesh against SOURCE's.

    A map may have been solved in either order, and then one of the two comparisons is trivial: the
    worse counts.
    """
    worlds = {
        "source": (evidence.map.mesh.interfaces, evidence.source_surface),
        "target": (evidence.map.image_mesh.interfaces, evidence.target_surface),
    }
    per_label: dict[str, Any] = {}
    places: list[tuple[float, dict[str, Any]]] = []
    missing: list[str] = []
    for space, (own, scan) in worlds.items():
        per_label[space] = {}
        for label in sorted({a for a, _ in (*own.pairs, *scan.pairs)} | {b for _, b in own.pairs if b}):
            pair = own.of_label(label), scan.of_label(label)
            if not all(len(s.triangles) for s in pair):
                missing.append(f"{evidence.name_of(label)} ({space})")
                continue
            both = {"map_to_scan": surface_distances(*pair), "scan_to_map": surface_distances(*pair[::-1])}
            per_label[space][str(label)] = {way: d.summary for way, d in both.items()}
            for way, d in both.items():
                places += _worst(
                    d, space, _noted(d, f"{evidence.name_of(label)}, {way.replace('_', ' ')}"), evidence
                )
    return _gate(per_label, missing, ranked(places), limit=limit, voxel_mm=evidence.voxel_mm)


def _noted(distances: Distances, what: str) -> Callable[[int], str]:
    return lambda row: f"{what}: {distances.distance_mm[row]:.3f} mm from the other surface"


def _worst(
    d: Distances, space: str, note: Callable[[int], str], evidence: Evidence
) -> list[tuple[float, dict[str, Any]]]:
    return worst_places(d.points, d.distance_mm, space=space, note=note, apart_mm=4 * evidence.voxel_mm)


def _gate(
    per_label: dict[str, Any],
    missing: list[str],
    where: list[dict[str, Any]],
    *,
    limit: Limit,
    voxel_mm: float,
) -> Gate:
    rows = [s for labels in per_label.values() for ways in labels.values() for s in ways.values()]
    worst = {k: max((row[k] for row in rows), default=float("nan")) for k in ("mean", "p95", "max")}
    sentence = (
        f"The surfaces of each label differ by at most {worst['mean']:.3f} mm on average "
        f"({worst['mean'] / voxel_mm:.2f} voxel) and by {worst['max']:.2f} mm at the worst place, "
        "whichever way is asked."
    )
    value: dict[str, Any] = {k: v for k, v in worst.items() if rows} | {"per_label": per_label}
    if missing:
        sentence = f"No surface to compare for {', '.join(missing)}. " + (sentence if rows else "")
        value["missing"] = missing
        worst["mean"] = float("nan")
    return judged(limit, worst, value=value, sentence=sentence.strip(), voxel_mm=voxel_mm, where=where)
