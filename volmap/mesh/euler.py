"""Euler numbers of labels: of their voxels and of their tets.

Both are counted on the dual complex, in which cells that share only an edge or a corner are not joined
(6-connected voxels, face-connected tets): one solid ball counts 1, a torus 0, each cavity adds 1.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.strata import label_interfaces, triangle_edges
from volmap.kernels.topology import Faces, match_faces, unique_edges

Ints = NDArray[np.int64]


def euler_of_voxels(inside: NDArray[np.bool_]) -> int:
    """Voxels, less face pairs, plus full 2 x 2 squares, less full 2 x 2 x 2 cubes (Kong & Rosenfeld 1989)."""
    total = 0
    for spans in np.ndindex(2, 2, 2):
        block = inside
        for axis in np.flatnonzero(spans):
            block = np.take(block, range(block.shape[axis] - 1), axis) & np.take(
                block, range(1, block.shape[axis]), axis
            )
        total += (-1) ** sum(spans) * int(block.sum())
    return total


def euler_of_tets(tets: Ints, labels: Ints, n_points: int, *, faces: Faces | None = None) -> dict[int, int]:
    """For each label above 0: tets, less faces, plus edges, less points, all of them inside the label.

    Parameters
    ----------
    faces : optional
        Of `topology.match_faces`, where they are at hand.
    """
    faces = faces or match_faces(tets)
    triangles, _ = label_interfaces(tets, labels, faces)
    surface, _ = triangle_edges(triangles, n_points)
    edges, edge_of_tet = unique_edges(tets)
    n = np.int64(n_points)
    inner_edge = ~np.isin(edges[:, 0] * n + edges[:, 1], surface[:, 0] * n + surface[:, 1])
    inner_point = np.ones(n_points, bool)
    inner_point[triangles] = False
    first, second, _ = faces
    inner_face = labels[first // 4] == labels[second // 4]
    label_of_edge, label_of_point = np.zeros(len(edges), np.int64), np.zeros(n_points, np.int64)
    label_of_edge[edge_of_tet] = labels[:, None]
    label_of_point[tets] = labels[:, None]
    n_labels = int(labels.max()) + 1
    number = np.bincount(labels, minlength=n_labels)
    number -= np.bincount(labels[first[inner_face] // 4], minlength=n_labels)
    number += np.bincount(label_of_edge[inner_edge], minlength=n_labels)
    number -= np.bincount(label_of_point[inner_point], minlength=n_labels)
    return {int(k): int(number[k]) for k in np.unique(labels) if k > 0}
