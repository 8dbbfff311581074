"""Points through the exact map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import barycentric_rows
from volmap.kernels.closest import build_tree, closest
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.topology import face_corners, match_faces
from volmap.types import MapChain, VolumeMap

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class MovedPoints:
    """Where points go, and how far outside the mesh they started.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
        NaN where a point was not carried.
    outside_mm : (n,) float64
        0 inside the mesh, else the distance to its surface.  Through a chain of maps: the largest of those a
        point met on its way, for the bodies of two maps of one scan are nearly but not quite the same.
    """

    points: Floats
    outside_mm: Floats

    @property
    def carried(self) -> NDArray[np.bool_]:
        """(n,) True where there is an answer."""
        return ~np.isnan(self.points[:, 0])

    @property
    def extrapolated(self) -> NDArray[np.bool_]:
        """(n,) True where the answer is a continuation from outside the mesh."""
        return self.carried & (self.outside_mm > 0)


def move_points(volume_map: VolumeMap | MapChain, points: Floats, *, reach_mm: float = 0.0) -> MovedPoints:
    """Carry points from SOURCE's world into TARGET's.

    Inside the mesh a point goes where its barycentric coordinates say: exact, no grid between.  Outside, and
    no farther than `reach_mm` from the surface, it goes with the affine map of the tet behind the closest
    place of the surface.  Farther out there is no answer.

    Parameters
    ----------
    volume_map : VolumeMap or MapChain
        Through a chain, points go from scan to scan, through each map in turn.
        ``map.reversed()`` carries from TARGET into SOURCE.
    points : (n, 3) float64, mm, RAS+
    reach_mm : float
        In each scan on the way.
    """
    here = np.array(points, np.float64).reshape(-1, 3)
    outside_mm = np.zeros(len(here))
    for step in volume_map.maps:
        on_way = np.flatnonzero(~np.isnan(here[:, 0]))
        moved = _move_through_one(step, here[on_way], reach_mm)
        here[on_way] = moved.points
        outside_mm[on_way] = np.maximum(outside_mm[on_way], moved.outside_mm)
    return MovedPoints(here, outside_mm)


def _move_through_one(volume_map: VolumeMap, points: Floats, reach_mm: float) -> MovedPoints:
    mesh = volume_map.mesh
    vertices, tets = np.array(mesh.points), np.array(mesh.tets)
    tet, weights = locate(build_buckets(vertices, tets), vertices, tets, points)
    outside_mm = np.zeros(len(points))
    outside = np.flatnonzero(tet < 0)
    if len(outside):
        near, outside_mm[outside] = _nearest_tets(vertices, tets, points[outside])
        reached = outside_mm[outside] <= reach_mm
        some = outside[reached]
        tet[some] = near[reached]
        weights[some] = _coordinates(vertices, tets[near[reached]], points[some])
    return MovedPoints(interpolate(tets, volume_map.images, tet, weights), outside_mm)


def _nearest_tets(vertices: Floats, tets: Ints, points: Floats) -> tuple[Ints, Floats]:
    """The tet behind the closest place of the hull, and the distance to it, mm."""
    hull = match_faces(tets)[2]
    triangles = np.array(face_corners(tets, hull))
    triangle, _, squared = closest(build_tree(vertices, triangles), vertices, triangles, points)
    return np.asarray(hull[triangle] // 4), np.sqrt(squared)


def _coordinates(vertices: Floats, tets: Ints, points: Floats) -> Floats:
    """(n, 4) barycentric coordinates of one point a tet, below 0 outside it."""
    rows = barycentric_rows(vertices, np.ascontiguousarray(tets))
    inner = np.einsum("nrd,nd->nr", rows[:, :3], points - rows[:, 3])
    return np.concatenate([1.0 - inner.sum(axis=1, keepdims=True), inner], axis=1)
