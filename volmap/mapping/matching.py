"""Closest points between the image of the source's patches and the target's patches, both ways."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest
from volmap.kernels.blocksystem import Pattern
from volmap.kernels.observations import Observations, joined
from volmap.mapping.patches import Patch, areas, face_normals

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def edge_numbers(pattern: Pattern, first: Ints, second: Ints) -> Ints:
    """Number of the edge between two points each, -1 where the mesh has none."""
    n = np.int64(max(pattern.edges.max(), first.max(), second.max()) + 1)
    keys = pattern.edges[:, 0] * n + pattern.edges[:, 1]
    wanted = np.minimum(first, second) * n + np.maximum(first, second)
    place = np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)
    return np.asarray(np.where(keys[place] == wanted, place, -1))


def unit(vectors: Floats) -> Floats:
    """Vectors of length one; zero stays zero."""
    length = np.linalg.norm(vectors, axis=1, keepdims=True)
    return np.asarray(np.divide(vectors, length, out=np.zeros_like(vectors), where=length > 0))


def at_points(values: Floats, triangles: Ints, n_points: int) -> Floats:
    """Sum of a triangle quantity, (k,) or (k, 3), over the triangles of each point."""
    flat = values.reshape(len(triangles), -1)
    columns = [
        np.bincount(triangles.ravel(), np.repeat(flat[:, d], 3), n_points) for d in range(flat.shape[1])
    ]
    return np.stack(columns, axis=1).reshape((n_points, *values.shape[1:]))


@dataclass(eq=False)
class _Side:
    """A patch on one body: its triangles renumbered, points, areas at points, and search tree."""

    used: Ints
    triangles: Ints
    area: Floats
    points: Floats
    tree: closest.Tree
    guess: Ints

    @staticmethod
    def of(points: Floats, triangles: Ints, share: Floats) -> _Side:
        used, local = np.unique(triangles, return_inverse=True)
        local = np.ascontiguousarray(local.reshape(-1, 3))
        here = np.array(points[used])
        area = at_points(areas(here, local) * share / 3.0, local, len(used))
        return _Side(used, local, area, here, closest.build_tree(here, local), np.full(0, -1))

    def move(self, points: Floats) -> None:
        self.points = np.ascontiguousarray(points[self.used])
        closest.refit(self.tree, self.points, self.triangles)

    @property
    def point_normals(self) -> Floats:
        return unit(at_points(face_normals(self.points, self.triangles), self.triangles, len(self.points)))

    def nearest(self, queries: Floats) -> tuple[Ints, Floats, Floats]:
        if len(self.guess) != len(queries):
            self.guess = np.full(len(queries), -1)
        triangle, barycentric, squared = closest.closest(
            self.tree, self.points, self.triangles, queries, guess=self.guess
        )
        self.guess = triangle
        return triangle, barycentric, squared


@dataclass(frozen=True)
class Residual:
    """What is left between the boundaries.

    Parameters
    ----------
    rms_mm, mean_mm, max_mm : float
        Area-weighted over both directions; matches whose normals disagree do not count.
    rejected : float
        Share of the area whose matches disagree.
    """

    rms_mm: float
    mean_mm: float
    max_mm: float
    rejected: float


@dataclass(eq=False)
class _Pair:
    """One patch on both bodies."""

    source: _Side
    target: _Side
    target_normals: Floats
    face_edges: Ints


class Matcher:
    """Matches the image of a mesh's patches with a target's.

    Parameters
    ----------
    patches : sequence of Patch
    source_points, target_points : (n, 3) float64, mm
    pattern : Pattern
        Of the source mesh.
    across : float
        Share of a match that acts across the normal.
    """

    def __init__(
        self,
        patches: tuple[Patch, ...],
        source_points: Floats,
        target_points: Floats,
        *,
        pattern: Pattern,
        across: float,
    ) -> None:
        self.across = across
        self.pairs: list[_Pair] = []
        for patch in patches:
            source = _Side.of(source_points, patch.source, patch.source_share)
            target = _Side.of(target_points, patch.target, patch.target_share)
            t = patch.source
            edges = np.full((len(t), 6), -1)
            edges[:, 0] = edge_numbers(pattern, t[:, 0], t[:, 1])
            edges[:, 1] = edge_numbers(pattern, t[:, 0], t[:, 2])
            edges[:, 3] = edge_numbers(pattern, t[:, 1], t[:, 2])
            self.pairs.append(_Pair(source, target, target.point_normals, edges))
        self.source_area = sum(float(p.source.area.sum()) for p in self.pairs)
        self.target_area = sum(float(p.target.area.sum()) for p in self.pairs)

    def match(self, images: Floats) -> tuple[Observations, Residual]:
        """Closest points both ways for the present image points (n, 3) mm; strengths sum to at most one."""
        parts, squares = [], []
        for pair in self.pairs:
            pair.source.move(images)
            for part, squared in (self._there(pair), self._back(pair)):
                parts.append(part)
                squares.append(squared)
        everything = joined(parts)
        weight, squared = everything.strengths, np.concatenate(squares)
        total = max(float(weight.sum()), 1e-300)
        distance = np.sqrt(squared)
        counted = weight > 0
        return everything, Residual(
            float(np.sqrt((weight * squared).sum() / total)),
            float((weight * distance).sum() / total),
            float(distance[counted].max()) if counted.any() else 0.0,
            1.0 - total,
        )

    def _there(self, pair: _Pair) -> tuple[Observations, Floats]:
        """Source points to the closest points of the target."""
        source, target = pair.source, pair.target
        triangle, barycentric, squared = target.nearest(source.points)
        corners = target.triangles[triangle]
        anchors = np.einsum("qk,qkd->qd", barycentric, target.points[corners])
        normals = unit(np.einsum("qk,qkd->qd", barycentric, pair.target_normals[corners]))
        agree = np.einsum("ij,ij->i", normals, source.point_normals) > 0
        n = len(source.used)
        weights = np.zeros((n, 4))
        weights[:, 0] = 1.0
        tets = np.zeros((n, 4), np.int64)
        tets[:, 0] = source.used
        strengths = np.where(agree, 0.5 * source.area / self.source_area, 0.0)
        edges = np.full((n, 6), -1)
        across = np.full(n, self.across)
        return Observations(tets, weights, edges, anchors, normals, strengths, across), squared

    def _back(self, pair: _Pair) -> tuple[Observations, Floats]:
        """Target points to the closest points of the image of the source."""
        source, target = pair.source, pair.target
        triangle, barycentric, squared = source.nearest(target.points)
        corners = source.triangles[triangle]
        facing = unit(face_normals(source.points, source.triangles))[triangle]
        agree = np.einsum("ij,ij->i", pair.target_normals, facing) > 0
        n = len(target.used)
        weights = np.zeros((n, 4))
        weights[:, :3] = barycentric
        tets = np.zeros((n, 4), np.int64)
        tets[:, :3] = source.used[corners]
        strengths = np.where(agree, 0.5 * target.area / self.target_area, 0.0)
        across = np.full(n, self.across)
        return Observations(
            tets, weights, pair.face_edges[triangle], target.points, pair.target_normals, strengths, across
        ), squared
