"""Where a given surface map cannot be the boundary of any one-to-one map: folds, tears, crushed triangles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.surface_map import unit_normals
from volmap.types.given_boundary import GivenBoundary

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FOLDED = -0.5  # cosine; neighbours that turn by more than 120 degrees ...
SMOOTH = 0.5  # ... where they turned by less than 60
CRUSHED = 0.01  # of the usual ratio of areas


@dataclass(frozen=True, eq=False)
class SurfaceFaults:
    """Faults of a surface map as it is given, in SOURCE's world.

    Parameters
    ----------
    folds : (a, 3) float64, mm
        Middles of edges over which the images of two neighbouring triangles fold, deeper than the tolerance.
    turned_deg : (a,) float64
        By how much they turn there.
    tears : (b, 3) float64, mm
        Places that are given several images, more than the tolerance apart.
    torn_mm : (b,) float64
        How far apart.
    crushed : (c, 3) float64, mm
        Centres of triangles that shrink to less than a hundredth of what is usual in area.
    shrunk : (c,) float64
        To what share of the usual.
    """

    folds: Floats
    turned_deg: Floats
    tears: Floats
    torn_mm: Floats
    crushed: Floats
    shrunk: Floats


def surface_faults(given: GivenBoundary) -> SurfaceFaults:
    """Find them; a fact of the file alone, whatever the map."""
    _, place = np.unique(given.points + 0.0, axis=0, return_inverse=True)
    place = place.reshape(-1)
    folds, cosine = _folds(given, place)
    tears, torn = _tears(given, place)
    here, there = (_areas(p, given.triangles) for p in (given.points, given.images))
    ratio = np.divide(there, here, out=np.ones_like(here), where=here > 0)
    usual = float(np.median(ratio))
    shrunk = ratio / usual if usual > 0 else ratio
    crushed = np.flatnonzero((shrunk < CRUSHED) & (here > 0))
    return SurfaceFaults(
        folds,
        np.degrees(np.arccos(np.clip(cosine, -1, 1))),
        tears,
        torn,
        given.points[given.triangles[crushed]].mean(axis=1),
        shrunk[crushed],
    )


def _areas(points: Floats, triangles: Ints) -> Floats:
    p = points[triangles]
    return np.asarray(0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1))


def _folds(given: GivenBoundary, place: Ints) -> tuple[Floats, Floats]:
    """Middles of folded edges, and the cosine of the images' normals across them."""
    corners = place[given.triangles]
    n = np.int64(place.max() + 1)
    first, second = corners[:, [0, 1, 2]].ravel(), corners[:, [1, 2, 0]].ravel()
    key = np.minimum(first, second) * n + np.maximum(first, second)
    order = np.argsort(key, kind="stable")
    pair = np.flatnonzero(key[order][1:] == key[order][:-1])
    a, b = order[pair], order[pair + 1]
    sign = np.where(first[a] == first[b], -1.0, 1.0)  # neighbours turned alike run along it both ways
    before, after = (
        sign * np.einsum("kd,kd->k", m[a // 3], m[b // 3])
        for m in (unit_normals(p, given.triangles) for p in (given.points, given.images))
    )
    folded = np.flatnonzero((after < FOLDED) & (before > SMOOTH))
    folded = folded[_depth(given, a[folded], b[folded]) > given.tolerance_mm]
    edge = given.triangles[a[folded] // 3]
    start, end = edge[np.arange(len(edge)), a[folded] % 3], edge[np.arange(len(edge)), (a[folded] + 1) % 3]
    return 0.5 * (given.points[start] + given.points[end]), after[folded]


def _depth(given: GivenBoundary, first: Ints, second: Ints) -> Floats:
    """How far the flatter of two images reaches from the edge they share, mm."""
    area = _areas(given.images, given.triangles)
    depths = []
    for side in (first, second):
        p = given.images[given.triangles[side // 3]]
        rows = np.arange(len(side))
        length = np.linalg.norm(p[rows, (side + 1) % 3] - p[rows, side % 3], axis=1)
        depths.append(2 * np.divide(area[side // 3], length, out=np.zeros(len(side)), where=length > 0))
    return np.asarray(np.minimum(*depths))


def _tears(given: GivenBoundary, place: Ints) -> tuple[Floats, Floats]:
    """Places with several images, and how far those lie apart."""
    low, high = np.full((place.max() + 1, 3), np.inf), np.full((place.max() + 1, 3), -np.inf)
    np.minimum.at(low, place, given.images)
    np.maximum.at(high, place, given.images)
    apart = np.linalg.norm(high - low, axis=1)
    torn = np.flatnonzero(apart > given.tolerance_mm)
    where = np.empty((len(apart), 3))
    where[place] = given.points
    return where[torn], apart[torn]
