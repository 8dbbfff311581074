"""Parts of a boundary that lie inside the body: what no crossing of triangles tells.

A piece may swallow another, or a shell close over a ball that reaches beyond its cavity, without any two
triangles of the boundary meeting.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from volmap.kernels.predicates import rational_sign
from volmap.types.tetmesh import TetMesh

Exact = tuple[Fraction, Fraction, Fraction]

# Corners put in place of each corner in turn: the tet and a point, 4, in it have equal signs throughout.
_REPLACED = ((4, 1, 2, 3), (0, 4, 2, 3), (0, 1, 4, 3), (0, 1, 2, 4))


def sheets(triangles: NDArray[np.int64]) -> NDArray[np.int64]:
    """Number the parts of a boundary that hang together at edges of exactly two triangles.

    Where more than two triangles meet in an edge (pieces that touch there), and at corners, parts end: what
    lies on the outer side may change.

    Parameters
    ----------
    triangles : (h, 3) int64

    Returns
    -------
    (h,) int64
        The part of each triangle.
    """
    ends = np.sort(triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    keys = ends[:, 0] * np.int64(triangles.max() + 1) + ends[:, 1]
    order = np.argsort(keys, kind="stable")
    starts = np.flatnonzero(np.r_[True, np.diff(keys[order]) != 0])
    pairs = starts[np.diff(np.r_[starts, len(keys)]) == 2]
    sides = (order[pairs] // 3, order[pairs + 1] // 3)
    links = coo_array((np.ones(len(pairs), np.int8), sides), shape=(len(triangles), len(triangles)))
    return np.asarray(connected_components(links, directed=False)[1], np.int64)


def buried_sheets(
    mesh: TetMesh, triangles: NDArray[np.int64], owners: NDArray[np.int64]
) -> list[tuple[NDArray[np.float64], int]]:
    """Parts of the boundary with body on their outer side.

    Where no two triangles cross, one place decides for a whole part: the centre of a triangle lies in no
    other tet than the triangle's own exactly when nothing covers the outer side.  The centre and every sign
    are rational numbers, without rounding.  A boundary of one part has infinity on its outer side.

    Parameters
    ----------
    mesh : TetMesh
    triangles : (h, 3) int64
        Outer faces of the tets.
    owners : (h,) int64
        The tet of each.

    Returns
    -------
    list of (place, tet)
        For each such part a place on it, (3,) float64 in mm, and a tet of the body that holds the place.
    """
    part = sheets(triangles)
    firsts = np.unique(part, return_index=True)[1]
    if len(firsts) == 1:
        return []
    corners = mesh.points[mesh.tets]
    low, high = corners.min(axis=1), corners.max(axis=1)
    found = []
    for row in firsts:
        face = mesh.points[triangles[row]]
        centre = face.mean(axis=0)
        slack = 1e-15 * np.abs(face).max()  # several times what the mean may have been rounded by
        near = (low <= centre + slack).all(axis=1) & (centre - slack <= high).all(axis=1)
        near[owners[row]] = False
        exact = _centre(face)
        holder = next((t for t in np.flatnonzero(near) if _holds(corners[t], exact)), None)
        if holder is not None:
            found.append((centre, int(holder)))
    return found


def _exact(point: NDArray[np.float64]) -> Exact:
    x, y, z = (Fraction(c) for c in point)
    return x, y, z


def _centre(face: NDArray[np.float64]) -> Exact:
    a, b, c = (_exact(p) for p in face)
    return (a[0] + b[0] + c[0]) / 3, (a[1] + b[1] + c[1]) / 3, (a[2] + b[2] + c[2]) / 3


def _holds(corners: NDArray[np.float64], point: Exact) -> bool:
    """True when the closed tet, positive or not, holds the point."""
    five = [*(_exact(c) for c in corners), point]
    signs = [rational_sign([five[i] for i in row]) for row in _REPLACED]
    return min(signs) >= 0 or max(signs) <= 0
