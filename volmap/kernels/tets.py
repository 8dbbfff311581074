"""Arithmetic of single tetrahedra, vectorised."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.compiled import kernel

# Corner pairs of the six edges, and the four faces seen counter-clockwise from outside a positive tet.
EDGES = np.array([[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]])
FACES = np.array([[1, 2, 3], [0, 3, 2], [0, 1, 3], [0, 2, 1]])


def edge_matrices(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m, 3, 3) matrices whose columns are p1 - p0, p2 - p0, p3 - p0, mm."""
    corners = points[tets]
    return np.ascontiguousarray(np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2))


def signed_volumes(points: NDArray[np.float64], tets: NDArray[np.int64]) -> NDArray[np.float64]:
    """(m,) signed volumes, mm3."""
    volumes = np.empty(len(tets))
    _fill_volumes(plain(points, np.float64), plain(tets, np.int64), volumes)
    return volumes


@kernel
def _fill_volumes(points, tets, volumes):  # type: ignore[no-untyped-def]
    """Triple products of the edges at the first corner, over six."""
    for t in range(tets.shape[0]):
        a, b, c, d = tets[t, 0], tets[t, 1], tets[t, 2], tets[t, 3]
        x, y, z = points[a, 0], points[a, 1], points[a, 2]
        b0, b1, b2 = points[b, 0] - x, points[b, 1] - y, points[b, 2] - z
        c0, c1, c2 = points[c, 0] - x, points[c, 1] - y, points[c, 2] - z
        d0, d1, d2 = points[d, 0] - x, points[d, 1] - y, points[d, 2] - z
        volumes[t] = ((b1 * c2 - b2 * c1) * d0 + (b0 * c1 - b1 * c0) * d2 + (b2 * c0 - b0 * c2) * d1) / 6.0


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
