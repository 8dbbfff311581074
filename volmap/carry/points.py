"""Points through the exact map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.carry.rules import apply_rule
from volmap.kernels.barycentric import barycentric_rows
from volmap.kernels.closest import build_tree, closest
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.topology import face_corners, match_faces
from volmap.types import MapChain, Rule, VolumeMap

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
    tets : (k, n) int64
        The tet of each of the k maps that carried the point (-1: none did).  A point on a face, edge or
        corner of several belongs to the one it is deepest in, and of equal ones to the first
        (`kernels.locate`): the map is the same in all of them, its gradient is not.  A point outside has
        the tet behind the closest place of the surface.
    """

    points: Floats
    outside_mm: Floats
    tets: Ints

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
    tets = np.full((len(volume_map.maps), len(here)), -1)
    for k, step in enumerate(volume_map.maps):
        on_way = np.flatnonzero(~np.isnan(here[:, 0]))
        here[on_way], outside, tets[k, on_way] = _move_through_one(step, here[on_way], reach_mm)
        outside_mm[on_way] = np.maximum(outside_mm[on_way], outside)
    return MovedPoints(here, outside_mm, tets)


def gradients_at(volume_map: VolumeMap | MapChain, moved: MovedPoints) -> Floats:
    """F of the map at moved points: constant in each tet, the product of all F through a chain.

    Parameters
    ----------
    volume_map : VolumeMap or MapChain
        The one they moved through.
    moved : MovedPoints

    Returns
    -------
    (n, 3, 3) float64
        ``dy = F dx``; NaN where a point was not carried.
    """
    whole: Floats | None = None
    for step, tet in zip(volume_map.maps, moved.tets, strict=True):
        here = step.gradients.take(np.maximum(tet, 0), axis=0)
        whole = here if whole is None else here @ whole
    assert whole is not None
    whole[~moved.carried] = np.nan
    return whole


def carried_values(
    rule: Rule | str, values: Floats, volume_map: VolumeMap | MapChain, moved: MovedPoints
) -> Floats:
    """Values of a quantity at moved points, as they are where the points went.

    Parameters
    ----------
    rule : Rule
        `types.Rule` says which is for what.
    values : (n,), (n, 3) or (n, 3, 3) float64
        Scalars, vectors or symmetric tensors at the points before they moved.
    volume_map : VolumeMap or MapChain
        The one they moved through.
    moved : MovedPoints

    Returns
    -------
    Same shape as `values`
        NaN where a point was not carried.
    """
    if len(volume_map.maps) == 1:  # a factor a tet is less work than a gradient a point
        of_point = np.where(moved.carried, moved.tets[0], -1)
        return apply_rule(rule, values, volume_map.maps[0].gradients, of_point)
    carried = apply_rule(rule, values, gradients_at(volume_map, moved))
    carried[~moved.carried] = np.nan
    return carried


def _move_through_one(volume_map: VolumeMap, points: Floats, reach_mm: float) -> tuple[Floats, Floats, Ints]:
    """Where points go, how far outside they were, mm, and the tet that carried each."""
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
    return interpolate(tets, volume_map.images, tet, weights), outside_mm, tet


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
