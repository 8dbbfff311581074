"""Snapping lattice points onto nearby interfaces."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.stars import Stars, six_volumes

Ints = NDArray[np.int64]

MOST_TIES = 6  # labels a point may stand between


def disjoint(sets: Ints, edges: Ints) -> NDArray[np.bool_]:
    """(m,) whether the two points of each edge have no label in common."""
    first, second = sets[edges[:, 0]], sets[edges[:, 1]]
    apart = first[:, 0] != second[:, 0]
    a, b = first[apart], second[apart]
    apart[apart] = ~((a[:, :, None] == b[:, None, :]) & (a[:, :, None] >= 0)).any(axis=(1, 2))
    return np.asarray(apart)


def add_labels(sets: Ints, rows: Ints, labels: Ints) -> None:
    """Add one label to each of some different rows of label sets, in place; a full row stays."""
    known = (sets[rows] == labels[:, None]).any(axis=1)
    free = (sets[rows] >= 0).sum(axis=1)
    fits = ~known & (free < sets.shape[1])
    sets[rows[fits], free[fits]] = labels[fits]


@inner_kernel
def _holds_floor(stars, v, floors):  # type: ignore[no-untyped-def]
    """Whether every tet around a point has at least its least volume (six times, mm3)."""
    for s in range(stars.start[v], stars.start[v + 1]):
        t = stars.cell[s]
        if six_volumes(stars.points, stars.tets, t) < floors[t]:
            return False
    return True


@kernel
def _snap(stars, movers, places, floors, moved, done):  # type: ignore[no-untyped-def]
    points = stars.points
    for q in range(movers.shape[0]):
        v = movers[q]
        if moved[v] == 2:
            continue
        if moved[v] == 0:
            x, y, z = points[v, 0], points[v, 1], points[v, 2]
            points[v, 0], points[v, 1], points[v, 2] = places[q, 0], places[q, 1], places[q, 2]
            if not _holds_floor(stars, v, floors):
                points[v, 0], points[v, 1], points[v, 2] = x, y, z
                continue
        moved[v] = 2
        done[q] = True


def snap(
    stars: Stars,
    movers: Ints,
    places: NDArray[np.float64],
    *,
    floors: NDArray[np.float64],
    moved: Ints,
) -> NDArray[np.bool_]:
    """Move points one after another, each at most once, unless a tet would fall under its floor.

    Parameters
    ----------
    stars : Stars
        Its points change in place.
    movers : (k,) int64
        Points, the most urgent first; a point may occur several times.
    places : (k, 3) float64, mm
    floors : (m,) float64
        Six times the least volume of each tet, mm3.
    moved : (n,) int64
        0 never moved, 1 moved in an earlier round (stays, but counts as done), 2 done in this round; changed.

    Returns
    -------
    (k,) bool
        Which of the movers were done.
    """
    done = np.zeros(len(movers), np.bool_)
    _snap(stars, movers, places, floors, moved, done)
    return done
