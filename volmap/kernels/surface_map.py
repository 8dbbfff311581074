"""A map that is given on a surface, read off at the points of another surface that lies nearly on it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.closest import build_tree, closest

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

RIM_SHARE = 1 / 6  # of the reach: how far beyond an open rim of the given surface a point may lie
TURNED = 0.5  # cosine; surfaces that meet at more than 60 degrees are not the same surface


class Spoken(NamedTuple):
    """What a given surface says of the points of a mesh's boundary.

    Parameters
    ----------
    rows : (k,) int64
        Points of the mesh it speaks of, ascending.
    anchors : (k, 3) float64, mm
        Where it sends them.
    gap_mm : (k,) float64
        How far from the given surface they lie.
    triangle : (k,) int64
        Triangle of the given surface each was read off at.
    covered : (m,) bool
        Boundary triangles of the mesh with all three corners spoken of.
    area : (k,) float64, mm2
        Area of the covered triangles around each point.
    """

    rows: Ints
    anchors: Floats
    gap_mm: Floats
    triangle: Ints
    covered: Bools
    area: Floats


def unit_normals(points: Floats, triangles: Ints) -> Floats:
    """(m, 3) normals of length one; zero for triangles without area."""
    p = points[triangles]
    normals = np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0])
    length = np.linalg.norm(normals, axis=1, keepdims=True)
    return np.asarray(np.divide(normals, length, out=np.zeros_like(normals), where=length > 0))


def rim_edges(points: Floats, triangles: Ints) -> Bools:
    """(m, 3) True where the edge opposite a corner belongs to one triangle alone (by place)."""
    _, place = np.unique(points + 0.0, axis=0, return_inverse=True)
    corners = place.reshape(-1)[triangles]
    edges = np.sort(corners[:, [[1, 2], [2, 0], [0, 1]]], axis=2).reshape(-1, 2)
    _, which, count = np.unique(edges, axis=0, return_inverse=True, return_counts=True)
    return np.asarray(count[which.reshape(-1)].reshape(-1, 3) == 1)


def read_off(
    points: Floats,
    triangles: Ints,
    outer: Bools,
    given_points: Floats,
    given_triangles: Ints,
    given_images: Floats,
    *,
    reach_mm: float,
) -> Spoken:
    """Where a given surface map sends the points of a mesh's boundary.

    Each point takes the closest point of the given surface.  A triangle of the given surface speaks either of
    the outer boundary or of the surfaces between labels, whichever it lies nearer to and along; so points of
    an inner surface close under the outer one are not drawn onto it.

    Parameters
    ----------
    points : (n, 3) float64, mm
        Of the mesh.
    triangles : (m, 3) int64
        Its boundary, outer and between labels.
    outer : (m,) bool
        True for triangles towards the outside.
    given_points, given_triangles, given_images : (p, 3), (q, 3), (p, 3)
    reach_mm : float
        Points farther from the given surface, or beyond its open rim by more than a sixth of this, are not
        spoken of.
    """
    points, triangles = np.array(points), np.array(triangles)
    given_points, given_triangles = np.array(given_points), np.array(given_triangles)
    kind = _kinds(points, triangles, outer, given_points, given_triangles, reach_mm)
    rim = rim_edges(given_points, given_triangles)
    normals = unit_normals(given_points, given_triangles)
    n = len(points)
    gap, triangle, anchors = np.full(n, np.inf), np.full(n, -1), np.zeros((n, 3))
    for own, faces in ((0, triangles[outer]), (1, triangles[~outer])):
        speaking = np.flatnonzero(kind == own)
        rows = np.unique(faces)
        if not len(speaking) or not len(rows):
            continue
        t, barycentric, squared = _closest(given_points, given_triangles[speaking], points[rows])
        t = speaking[t]
        foot = np.einsum("qk,qkd->qd", barycentric, given_points[given_triangles[t]])
        offset = points[rows] - foot
        along = offset - np.einsum("qd,qd->q", offset, normals[t])[:, None] * normals[t]
        on_rim = (rim[t] & (barycentric <= 1e-9)).any(axis=1)
        beyond = on_rim & (np.linalg.norm(along, axis=1) > RIM_SHARE * reach_mm)
        apart = np.where(beyond, np.inf, np.sqrt(squared))
        better = apart < gap[rows]
        where = rows[better]
        gap[where], triangle[where] = apart[better], t[better]
        anchors[where] = np.einsum(
            "qk,qkd->qd", barycentric[better], np.asarray(given_images)[given_triangles[t[better]]]
        )
    spoken = gap <= reach_mm
    covered = np.asarray(spoken[triangles].all(axis=1))
    p = points[triangles[covered]]
    area = 0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1)
    share = np.bincount(triangles[covered].ravel(), np.repeat(area / 3, 3), n)
    rows = np.flatnonzero(share > 0)
    return Spoken(
        rows, anchors[rows], gap[rows], triangle[rows], covered, np.asarray(share[rows], np.float64)
    )


def _closest(points: Floats, triangles: Ints, queries: Floats) -> tuple[Ints, Floats, Floats]:
    triangles = np.ascontiguousarray(triangles)
    return closest(build_tree(points, triangles), points, triangles, np.ascontiguousarray(queries))


def _kinds(
    points: Floats, triangles: Ints, outer: Bools, given: Floats, given_triangles: Ints, reach_mm: float
) -> Ints:
    """(q,) 0 for triangles of the given surface that speak of the outer boundary, 1 for inner ones."""
    if outer.all():
        return np.zeros(len(given_triangles), np.int64)
    centres = given[given_triangles].mean(axis=1)
    facing = unit_normals(given, given_triangles)
    costs = []
    for faces in (triangles[outer], triangles[~outer]):
        t, _, squared = _closest(points, faces, centres)
        cosine = np.abs(np.einsum("qd,qd->q", facing, unit_normals(points, faces)[t]))
        costs.append(np.sqrt(squared) + np.where(cosine < TURNED, reach_mm, 0.0))
    return np.asarray(costs[1] < costs[0], np.int64)
