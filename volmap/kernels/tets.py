"""Arithmetic of single tetrahedra, vectorised."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

# Corner pairs of the six edges, and the four faces seen counter-clockwise from outside a positive tet.
EDGES = np.array([[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]])
FACES = np.array([[1, 2, 3], [0, 3, 2], [0, 1, 3], [0, 2, 1]])


def edge_matrices(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m, 3, 3) matrices whose columns are p1 - p0, p2 - p0, p3 - p0, mm."""
    corners = points[tets]
    return np.ascontiguousarray(np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2))


def signed_volumes(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m,) signed volumes, mm3."""
    p = points[tets]
    a, b, c = p[:, 1] - p[:, 0], p[:, 2] - p[:, 0], p[:, 3] - p[:, 0]
    return np.asarray(np.einsum("ij,ij->i", np.cross(a, b), c) / 6.0)


def deformation_gradients(
    points: NDArray[np.float64], images: NDArray[np.float64], tets: NDArray[np.int64]
) -> NDArray[np.float64]:
    """(m, 3, 3) F with ``F @ (edges of points) = edges of images``."""
    return edge_matrices(images, tets) @ np.linalg.inv(edge_matrices(points, tets))


def shape_gradients(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m, 4, 3) gradients of the four barycentric coordinates, 1/mm."""
    inverse = np.linalg.inv(edge_matrices(points, tets))
    gradients = np.empty((len(tets), 4, 3))
    gradients[:, 1:] = inverse
    gradients[:, 0] = -inverse.sum(axis=1)
    return gradients


def dihedral_degrees(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m, 6) dihedral angles at the edges in the order of EDGES, degrees."""
    g = shape_gradients(points, tets)
    n = g / np.linalg.norm(g, axis=2, keepdims=True)
    angles = np.empty((len(tets), 6))
    for e, (a, b) in enumerate(EDGES):
        c, d = (k for k in range(4) if k not in (a, b))  # the two faces that meet in edge ab
        cosine = -np.einsum("ij,ij->i", n[:, c], n[:, d])
        angles[:, e] = np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))
    return angles
