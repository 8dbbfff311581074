"""Which tet of a mesh holds a place, or is nearest to it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest, locate, topology
from volmap.kernels.tets import edge_matrices
from volmap.types import TetMesh

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def holding_tets(mesh: TetMesh, queries: Floats) -> tuple[Ints, Floats, Floats]:
    """The tet that holds each query; outside the mesh, the one behind the nearest face.

    Parameters
    ----------
    mesh : TetMesh
    queries : (q, 3) float64, mm

    Returns
    -------
    tet : (q,) int64
    barycentric : (q, 4) float64
        Some are negative outside: the tet is continued beyond its face.
    gap_mm : (q,) float64
        Distance from the mesh.
    """
    points, tets, queries = np.array(mesh.points), np.array(mesh.tets), np.array(queries)
    tet, _ = locate.locate(locate.build_buckets(points, tets), points, tets, queries)
    gap_mm = np.zeros(len(queries))
    outside = np.flatnonzero(tet < 0)
    if len(outside):
        hull = topology.match_faces(tets)[2]
        triangles = topology.face_corners(tets, hull)
        tree = closest.build_tree(points, triangles)
        triangle, _, squared = closest.closest(tree, points, triangles, queries[outside])
        tet = tet.copy()
        tet[outside] = hull[triangle] // 4
        gap_mm[outside] = np.sqrt(squared)
    inverse = np.linalg.inv(edge_matrices(points, tets[tet]))
    barycentric = np.empty((len(tet), 4))
    barycentric[:, 1:] = np.einsum("kij,kj->ki", inverse, queries - points[tets[tet, 0]])
    barycentric[:, 0] = 1.0 - barycentric[:, 1:].sum(axis=1)
    return tet, barycentric, gap_mm
