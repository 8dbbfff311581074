"""Guides: points of the source that the user says go to points of the target."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest, locate, topology
from volmap.kernels.blocksystem import Pattern
from volmap.kernels.observations import Observations
from volmap.kernels.tets import edge_matrices
from volmap.types import InputError, LandmarkPairs, TetMesh


def guide_observations(
    mesh: TetMesh, guides: LandmarkPairs, *, pattern: Pattern, reach_mm: float
) -> Observations:
    """Pulls of the guides, strengths summing to one, weighted by 1 / sd^2.

    A guide up to `reach_mm` outside the body is tied to the nearest tet, continued beyond its face.

    Raises
    ------
    InputError
        A guide lies farther outside the source body.
    """
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    tet = _holding_tets(points, tets, guides, reach_mm)
    inverse = np.linalg.inv(edge_matrices(points, tets[tet]))
    barycentric = np.empty((len(tet), 4))
    barycentric[:, 1:] = np.einsum("kij,kj->ki", inverse, guides.points - points[tets[tet, 0]])
    barycentric[:, 0] = 1.0 - barycentric[:, 1:].sum(axis=1)
    assert guides.sd_mm is not None
    share = guides.sd_mm**-2.0
    normals = np.zeros((len(tet), 3))
    normals[:, 0] = 1.0
    return Observations(
        tets[tet],
        barycentric,
        pattern.edge_of_tet[tet],
        np.array(guides.to_points),
        normals,
        share / share.sum(),
        np.ones(len(tet)),
    )


def _holding_tets(
    points: NDArray[np.float64], tets: NDArray[np.int64], guides: LandmarkPairs, reach_mm: float
) -> NDArray[np.int64]:
    """The tet that holds each guide, or the nearest one."""
    queries = np.array(guides.points)
    tet, _ = locate.locate(locate.build_buckets(points, tets), points, tets, queries)
    outside = np.flatnonzero(tet < 0)
    if not len(outside):
        return tet
    hull = topology.match_faces(tets)[2]
    triangles = topology.face_corners(tets, hull)
    tree = closest.build_tree(points, triangles)
    triangle, _, squared = closest.closest(tree, points, triangles, queries[outside])
    for row, gap in zip(outside, np.sqrt(squared), strict=True):
        if gap > reach_mm:
            x, y, z = queries[row]
            raise InputError(
                "a guide lies outside the body it starts from",
                where=f"guide {guides.names[row]}",
                found=f"({x:.2f}, {y:.2f}, {z:.2f}) mm, {gap:.1f} mm away",
                expected="a point inside a label",
                remedy="correct its coordinates (RAS+ mm), swap the columns if it was given the other way "
                "round, or drop it",
                refused=True,
            )
    tet = tet.copy()
    tet[outside] = hull[triangle] // 4
    return tet


def guide_rms(observations: Observations, points: NDArray[np.float64]) -> float:
    """Root mean square distance of the guides from where they should be, in units of their sd ratio, mm."""
    placed = np.einsum("kc,kcd->kd", observations.weights, points[observations.corners])
    squared = ((placed - observations.anchors) ** 2).sum(axis=1)
    return float(np.sqrt((observations.strengths * squared).sum()))
