"""Where a map can be trusted: the one definition, for tets, points and voxels.

A tet is reliable when none of the reasons below speaks against it.  What could not be assessed speaks neither
way and is told (`Reliability.not_assessed`).  Explained for users in `shared/guide/measures.md`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from volmap.kernels.folds import cube_determinants
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.rasterise import tets_on_grid
from volmap.measure.residual import Residual
from volmap.types import Gate, Grid, GridField, LabelVolume, TetMesh, Verdict, VolumeMap

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

NEAR_VOXELS = 3.0
"""How far a bad place reaches, in voxels of the coarser scan: about an edge of the default mesh, beyond which
the map is decided by other places.  Common practice, no source."""

RESIDUAL_VOXELS = 1.0
"""A boundary farther than this from the scan's own is another boundary: where the mean fails in the gate
`boundary_distance_mm`.  Common practice, no source."""

ORDERS_VOXELS = 1.0
"""Where the solves on the two meshes, each on its own, differ by more than this, the mesh decides and not the
scans: where the mean fails in the gate `order_difference_mm`.  Common practice, no source."""

REASONS: Mapping[str, str] = {
    "gate": f"within {NEAR_VOXELS:g} voxels of a place that a failed gate names, or a failed gate names none",
    "boundary": f"within {NEAR_VOXELS:g} voxels of a boundary that is off by more than "
    f"{RESIDUAL_VOXELS:g} voxel",
    "volume_ratio": "volume ratio not positive, or beyond what its gate allows 99.8 % of the volume",
    "fold": "holds a voxel of a cube in which a sampled field folds",
    "orders": f"the solves on the two meshes differ by more than {ORDERS_VOXELS:g} voxel on their own",
}


@dataclass(frozen=True, eq=False)
class Reliability:
    """Which tets of a map can be trusted, and what speaks against the others.

    Parameters
    ----------
    against : (m, k) bool
        A column for each of `REASONS`, in order.
    not_assessed : tuple of str
        Reasons that could not be looked at.
    failed_gates : tuple of str
    """

    against: Bools
    not_assessed: tuple[str, ...] = ()
    failed_gates: tuple[str, ...] = ()

    @property
    def tets(self) -> Bools:
        """(m,) True where nothing speaks against."""
        return np.asarray(~self.against.any(axis=1))

    def of_points(self, mesh: TetMesh) -> Bools:
        """(n,) True where every tet around a mesh point is reliable."""
        good = np.ones(len(mesh.points), bool)
        good[mesh.tets[~self.tets].ravel()] = False
        return good

    def on_grid(self, mesh: TetMesh, grid: Grid) -> LabelVolume:
        """1 at voxel centres inside reliable tets; 0 in others and outside the mesh."""
        owner = tets_on_grid(grid.to_index(mesh.points), mesh.tets, grid.shape)
        mask = np.append(self.tets, False).astype(np.uint16)[owner]  # owner -1, outside, takes the last
        return LabelVolume(grid, mask, {1: "reliable"}, "reliable")

    def words(self, tet: int) -> str:
        """The reasons against one tet, joined by spaces."""
        return " ".join(name for name, bad in zip(REASONS, self.against[tet], strict=True) if bad)


def reliability(
    volume_map: VolumeMap,
    gates: Sequence[Gate],
    *,
    residuals: Mapping[str, Sequence[Residual]],
    fields: Mapping[str, GridField],
    alone: tuple[VolumeMap, VolumeMap] | None,
    voxel_mm: float,
) -> Reliability:
    """Hold every tet against every reason.

    Parameters
    ----------
    volume_map : VolumeMap
    gates : sequence of Gate
        Of the map's certificate.
    residuals : mapping of str to sequence of Residual
        Of each label, in the worlds 'source' and 'target'.
    fields : mapping of str to GridField
        'source': the field on SOURCE's grid; 'target': that on TARGET's.
    alone : (VolumeMap, VolumeMap), optional
        The map and its opposite on the other mesh before they were drawn together; else the two as they are.
    voxel_mm : float
        Of the coarser scan.
    """
    bodies = {"source": volume_map.mesh, "target": volume_map.image_mesh}
    near_mm = NEAR_VOXELS * voxel_mm
    failed = [gate for gate in gates if gate.verdict is Verdict.FAIL]
    columns = [
        _near_failed_gates(failed, bodies, near_mm),
        _near_residuals(residuals, bodies, near_mm, RESIDUAL_VOXELS * voxel_mm),
        _ratio_beyond(volume_map, gates),
        _folded(fields, bodies),
        np.zeros(len(volume_map.mesh.tets), bool) if alone is None else _orders_apart(alone, voxel_mm),
    ]
    missing = () if alone is not None else ("orders",)
    return Reliability(np.stack(columns, axis=1), missing, tuple(gate.name for gate in failed))


def _near(mesh: TetMesh, places: Floats, reach_mm: float) -> Bools:
    """(m,) True for tets whose centre or a corner lies within reach of a place."""
    if not len(places):
        return np.zeros(len(mesh.tets), bool)
    tree = cKDTree(places)
    queries = np.concatenate([mesh.points, mesh.points[mesh.tets].mean(axis=1)])
    found = np.isfinite(tree.query(queries, distance_upper_bound=reach_mm)[0])
    corners, centres = found[: len(mesh.points)], found[len(mesh.points) :]
    return np.asarray(corners[mesh.tets].any(axis=1) | centres)


def _near_failed_gates(failed: Sequence[Gate], bodies: Mapping[str, TetMesh], near_mm: float) -> Bools:
    bad = np.zeros(len(bodies["source"].tets), bool)
    for gate in failed:
        if not gate.where:
            return np.ones_like(bad)
        for space, mesh in bodies.items():
            spots = [place["point_mm"] for place in gate.where if place["space"] == space]
            bad |= _near(mesh, np.array(spots, np.float64).reshape(-1, 3), near_mm)
    return bad


def _near_residuals(
    residuals: Mapping[str, Sequence[Residual]], bodies: Mapping[str, TetMesh], near_mm: float, most_mm: float
) -> Bools:
    bad = np.zeros(len(bodies["source"].tets), bool)
    for space, found in residuals.items():
        off = [r.to_scan.points[r.to_scan.lengths_mm > most_mm] for r in found]
        off += [r.to_map.ends[r.to_map.lengths_mm > most_mm] for r in found]
        if off:
            bad |= _near(bodies[space], np.concatenate(off), near_mm)
    return bad


def _ratio_beyond(volume_map: VolumeMap, gates: Sequence[Gate]) -> Bools:
    limits = next((gate.warn for gate in gates if gate.name == "volume_ratio"), None) or {}
    low, high = limits.get("p0_1_below", 0.0), limits.get("p99_9_above", np.inf)
    positive = (volume_map.mesh.volumes > 0) & (volume_map.image_mesh.volumes > 0)
    ratio = np.divide(
        volume_map.image_mesh.volumes,
        volume_map.mesh.volumes,
        out=np.full(len(positive), np.nan),
        where=positive,
    )
    return np.asarray(~(positive & (ratio >= low) & (ratio <= high)))


def _folded(fields: Mapping[str, GridField], bodies: Mapping[str, TetMesh]) -> Bools:
    bad = np.zeros(len(bodies["source"].tets) + 1, bool)  # the last one takes what lies outside
    for space, field in fields.items():
        smallest = cube_determinants(field.displacement, field.grid.affine)
        cubes = np.argwhere(np.isfinite(smallest) & (smallest <= 0))
        if not len(cubes):
            continue
        mesh, grid = bodies[space], field.grid
        owner = tets_on_grid(grid.to_index(mesh.points), mesh.tets, grid.shape)
        corners = (cubes[:, None] + np.indices((2, 2, 2)).reshape(3, 8).T[None]).reshape(-1, 3)
        bad[owner[tuple(corners.T)]] = True
        inside = np.floor(grid.to_index(mesh.points[mesh.tets].mean(axis=1))).astype(np.int64)
        known = ((inside >= 0) & (inside < smallest.shape)).all(axis=1)  # tets smaller than a voxel own none
        bad[:-1][known] |= smallest[tuple(inside[known].T)] <= 0
    return bad[:-1]


def _orders_apart(alone: tuple[VolumeMap, VolumeMap], voxel_mm: float) -> Bools:
    """Where going there by one solve and back by the other ends elsewhere; unknown counts as no."""
    here, there = alone
    starts, ends = (points[here.mesh.tets].mean(axis=1) for points in (here.mesh.points, here.images))
    other = there.mesh
    tet, weights = locate(build_buckets(other.points, other.tets), other.points, other.tets, ends)
    back = interpolate(other.tets, there.images, tet, weights)
    return np.asarray(np.linalg.norm(back - starts, axis=1) > ORDERS_VOXELS * voxel_mm)
