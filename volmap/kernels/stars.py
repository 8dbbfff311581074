"""The tets around a point, and how good they are."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel
from volmap.kernels.topology import incidence

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FLAT_SHARE = 1e-4  # of the cube of a point's size: background tets stay larger than this


class Stars(NamedTuple):
    """A mesh that can be asked for the tets around a point.

    Attributes
    ----------
    points : (n, 3) float64, mm
    tets : (m, 4) int64
    labels : (m,) int64
        0 is the background ring, which only has to stay positive.
    start, cell : int64
        Tets of point v are ``cell[start[v]:start[v + 1]]``.
    worth : (m,) float64
        `least_sine` of labelled tets, `six_volumes` of background ones; NaN where a point has moved since.
    """

    points: Floats
    tets: Ints
    labels: Ints
    start: Ints
    cell: Ints
    worth: Floats


def new_stars(points: Floats, tets: Ints, labels: Ints) -> Stars:
    """Stars of a mesh, with points of their own."""
    start, cell = incidence(tets, len(points))
    return Stars(np.array(points), np.array(tets), np.array(labels), start, cell, np.full(len(tets), np.nan))


@inner_kernel
def six_volumes(points, tets, t):  # type: ignore[no-untyped-def]
    """Six times the signed volume of tet t, mm3."""
    a, b, c, d = tets[t, 0], tets[t, 1], tets[t, 2], tets[t, 3]
    x, y, z = points[a, 0], points[a, 1], points[a, 2]
    b0, b1, b2 = points[b, 0] - x, points[b, 1] - y, points[b, 2] - z
    c0, c1, c2 = points[c, 0] - x, points[c, 1] - y, points[c, 2] - z
    d0, d1, d2 = points[d, 0] - x, points[d, 1] - y, points[d, 2] - z
    return (b1 * c2 - b2 * c1) * d0 + (b2 * c0 - b0 * c2) * d1 + (b0 * c1 - b1 * c0) * d2


@inner_kernel
def least_sine(points, tets, t):  # type: ignore[no-untyped-def]
    """Smallest sine of the six dihedral angles of tet t; -1 when its volume is not positive.

    With face normals n_i of twice the face area, ``sin = 6 V |e| / (|n_i| |n_j|)`` for the edge e shared by
    faces i and j (Klingner & Shewchuk 2007, section 2).
    """
    a, b, c, d = tets[t, 0], tets[t, 1], tets[t, 2], tets[t, 3]
    x, y, z = points[a, 0], points[a, 1], points[a, 2]
    b0, b1, b2 = points[b, 0] - x, points[b, 1] - y, points[b, 2] - z
    c0, c1, c2 = points[c, 0] - x, points[c, 1] - y, points[c, 2] - z
    d0, d1, d2 = points[d, 0] - x, points[d, 1] - y, points[d, 2] - z
    p0, p1, p2 = c1 * d2 - c2 * d1, c2 * d0 - c0 * d2, c0 * d1 - c1 * d0  # normal opposite b
    q0, q1, q2 = d1 * b2 - d2 * b1, d2 * b0 - d0 * b2, d0 * b1 - d1 * b0  # opposite c
    r0, r1, r2 = b1 * c2 - b2 * c1, b2 * c0 - b0 * c2, b0 * c1 - b1 * c0  # opposite d
    volume = r0 * d0 + r1 * d1 + r2 * d2
    if volume <= 0.0:
        return -1.0
    s0, s1, s2 = p0 + q0 + r0, p1 + q1 + r1, p2 + q2 + r2  # opposite a
    p, q, r = p0 * p0 + p1 * p1 + p2 * p2, q0 * q0 + q1 * q1 + q2 * q2, r0 * r0 + r1 * r1 + r2 * r2
    s = s0 * s0 + s1 * s1 + s2 * s2
    least = (b0 * b0 + b1 * b1 + b2 * b2) / (q * r)
    least = min(least, (c0 * c0 + c1 * c1 + c2 * c2) / (p * r))
    least = min(least, (d0 * d0 + d1 * d1 + d2 * d2) / (p * q))
    least = min(least, ((b0 - c0) ** 2 + (b1 - c1) ** 2 + (b2 - c2) ** 2) / (s * r))
    least = min(least, ((b0 - d0) ** 2 + (b1 - d1) ** 2 + (b2 - d2) ** 2) / (s * q))
    least = min(least, ((c0 - d0) ** 2 + (c1 - d1) ** 2 + (c2 - d2) ** 2) / (s * p))
    return volume * np.sqrt(least)


@inner_kernel
def _worth(stars, t):  # type: ignore[no-untyped-def]
    if stars.labels[t] != 0:
        return least_sine(stars.points, stars.tets, t)
    return six_volumes(stars.points, stars.tets, t)


@inner_kernel
def star_sine(stars, v, size_mm):  # type: ignore[no-untyped-def]
    """Least sine of the labelled tets around a point; -1 when any tet is not positive.

    Background tets must keep a little volume.
    """
    worst, flat = 9.0, FLAT_SHARE * size_mm**3
    for s in range(stars.start[v], stars.start[v + 1]):
        t = stars.cell[s]
        if np.isnan(stars.worth[t]):
            stars.worth[t] = _worth(stars, t)
        if stars.labels[t] != 0:
            worst = min(worst, stars.worth[t])
        elif stars.worth[t] <= flat:
            worst = -1.0
    return worst


@inner_kernel
def star_sine_at(stars, v, place, stop, size_mm):  # type: ignore[no-untyped-def]
    """`star_sine` as if the point were at `place`; gives up as soon as it is not above `stop`."""
    points = stars.points
    x, y, z = points[v, 0], points[v, 1], points[v, 2]
    points[v, 0], points[v, 1], points[v, 2] = place[0], place[1], place[2]
    worst, flat = 9.0, FLAT_SHARE * size_mm**3
    for s in range(stars.start[v], stars.start[v + 1]):
        worth = _worth(stars, stars.cell[s])
        if stars.labels[stars.cell[s]] != 0:
            worst = min(worst, worth)
        elif worth <= flat:
            worst = -1.0
        if worst <= stop:
            break
    points[v, 0], points[v, 1], points[v, 2] = x, y, z
    return worst


@inner_kernel
def move_to(stars, v, place):  # type: ignore[no-untyped-def]
    """Move a point; what its tets are worth is no longer known."""
    for d in range(3):
        stars.points[v, d] = place[d]
    for s in range(stars.start[v], stars.start[v + 1]):
        stars.worth[stars.cell[s]] = np.nan
