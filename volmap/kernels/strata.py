"""Which points of a labelled mesh lie inside, on an interface, on a curve of interfaces, or at a corner."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.lattice import edge_lengths
from volmap.kernels.topology import Faces, interfaces, label_sets, match_faces, unique_edges

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

BACKGROUND, INTERIOR, FACE, CURVE, CORNER = -1, 0, 1, 2, 3
MOST_TIES = 8


class Strata(NamedTuple):
    """How each point may move.

    Attributes
    ----------
    kind : (n,) int64
        -1 background only (fixed), 0 inside a label, 1 on an interface, 2 on a curve, 3 at a corner.
    ties : (n, 8) int64
        Labels that meet at the point, ascending, filled up with -1; 0 is the outside.
    start, neighbour : int64
        Points next to v in its own stratum are ``neighbour[start[v]:start[v + 1]]``.
    triangles, sides : (k, 3), (k, 2) int64
        The interfaces; normals point from the larger label to the smaller.
    normals : (n, 3) float64
        Unit normals of interface points, zero elsewhere.
    size_mm : (n,) float64
        Mean length of the edges at the point.
    """

    kind: Ints
    ties: Ints
    start: Ints
    neighbour: Ints
    triangles: Ints
    sides: Ints
    normals: Floats
    size_mm: Floats


def label_interfaces(tets: Ints, labels: Ints, faces: Faces | None = None) -> tuple[Ints, Ints]:
    """Faces between different labels, a background ring counting as outside; see `topology.interfaces`."""
    triangles, sides = interfaces(tets, labels, faces)
    real = sides[:, 0] != sides[:, 1]
    return triangles[real], sides[real]


def triangle_edges(triangles: Ints, n_points: int) -> tuple[Ints, Ints]:
    """Edges of triangles, each once and sorted, and how many triangles hold each."""
    pairs = np.sort(triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    keys, counts = np.unique(pairs[:, 0] * np.int64(n_points) + pairs[:, 1], return_counts=True)
    return np.stack([keys // n_points, keys % n_points], axis=1), counts


def _kinds(tets: Ints, labels: Ints, edges: Ints, counts: Ints, n_points: int) -> Ints:
    """Kind of each point: curves are interface edges that other than two triangles hold."""
    kind = np.full(n_points, BACKGROUND, np.int64)
    kind[tets[labels > 0]] = INTERIOR
    kind[edges] = FACE
    degree = np.bincount(edges[counts != 2].ravel(), minlength=n_points)
    kind[degree == 2] = CURVE
    kind[(degree > 0) & (degree != 2)] = CORNER
    return kind


def _compressed(pairs: Ints, n_points: int) -> tuple[Ints, Ints]:
    """Second of each pair, grouped by the first."""
    start = np.zeros(n_points + 1, np.int64)
    np.cumsum(np.bincount(pairs[:, 0], minlength=n_points), out=start[1:])
    keys = np.sort(pairs[:, 0] * np.int64(n_points) + pairs[:, 1])
    return start, keys % n_points


def _neighbours(inner: Ints, surface: Ints, curve: NDArray[np.bool_], kind: Ints) -> tuple[Ints, Ints]:
    """Inner points see all neighbours, interface points those on interfaces, curve points those on curves."""
    both = np.concatenate([inner, inner[:, ::-1]])
    chosen = [both[kind[both[:, 0]] == INTERIOR]]
    both, on_curve = np.concatenate([surface, surface[:, ::-1]]), np.r_[curve, curve]
    of = kind[both[:, 0]]
    chosen.append(both[(of == FACE) | ((of == CURVE) & on_curve)])
    return _compressed(np.concatenate(chosen), len(kind))


def point_normals(points: Floats, triangles: Ints) -> Floats:
    """(n, 3) unit normals: sums of the triangles' area normals; zero where they cancel."""
    p = points[triangles]
    area = np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0])
    total = np.stack(
        [np.bincount(triangles.ravel(), np.repeat(area[:, d], 3), len(points)) for d in range(3)], axis=1
    )
    length = np.linalg.norm(total, axis=1, keepdims=True)
    return np.asarray(np.divide(total, length, out=np.zeros_like(total), where=length > 1e-12))


def _sizes(points: Floats, edges: Ints) -> Floats:
    """(n,) mean length of the edges at each point, mm."""
    lengths, n = edge_lengths(points, edges), len(points)
    total = np.bincount(edges.ravel(), np.repeat(lengths, 2), n)
    return np.asarray(total / np.maximum(1, np.bincount(edges.ravel(), minlength=n)))


def new_strata(points: Floats, tets: Ints, labels: Ints) -> Strata:
    """Strata of a mesh with its background ring (label 0) or without (the hull is then an interface)."""
    faces = match_faces(tets)
    triangles, sides = label_interfaces(tets, labels, faces)
    surface, counts = triangle_edges(triangles, len(points))
    kind = _kinds(tets, labels, surface, counts, len(points))
    edges, edge_of_tet = unique_edges(tets)
    inner = np.zeros(len(edges), np.bool_)
    inner[edge_of_tet[labels > 0]] = True
    start, neighbour = _neighbours(edges[inner], surface, counts != 2, kind)
    return Strata(
        kind=kind,
        ties=label_sets(tets, labels, faces[2], len(points), most=MOST_TIES),
        start=start,
        neighbour=neighbour,
        triangles=triangles,
        sides=sides,
        normals=point_normals(points, triangles),
        size_mm=_sizes(points, edges),
    )
