"""Moving points so that the worst tets get better, interfaces staying where the labels tie.

Every move is guarded: it is kept only when the least dihedral sine around the point does not fall, so no tet
is ever turned over (Freitag & Ollivier-Gooch 1997; Klingner & Shewchuk 2007).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.stars import move_to, star_sine, star_sine_at
from volmap.kernels.tie import project

REACH = 0.6  # of a point's size: how far a projection may take it
SLACK = 1e-12


def search_directions() -> NDArray[np.float64]:
    """(26, 3) unit vectors to the faces, edges and corners of a cube."""
    grid = np.stack(np.meshgrid(*[[-1.0, 0.0, 1.0]] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    grid = grid[np.abs(grid).sum(axis=1) > 0]
    return np.asarray(grid / np.linalg.norm(grid, axis=1, keepdims=True))


@inner_kernel
def _average_shift(stars, strata, v, shift):  # type: ignore[no-untyped-def]
    """Fill the way to the mean of the neighbours, for an interface point without its normal part."""
    points, first, last = stars.points, strata.start[v], strata.start[v + 1]
    for d in range(3):
        total = 0.0
        for s in range(first, last):
            total += points[strata.neighbour[s], d]
        shift[d] = total / (last - first) - points[v, d] if last > first else 0.0
    if strata.kind[v] == 1:
        normal = strata.normals
        along = shift[0] * normal[v, 0] + shift[1] * normal[v, 1] + shift[2] * normal[v, 2]
        for d in range(3):
            shift[d] -= along * normal[v, d]


@inner_kernel
def _keep_if_good(stars, strata, v, place, floor):  # type: ignore[no-untyped-def]
    """Move a point to `place` unless the least sine around it falls under `floor`; True when moved."""
    sine = star_sine_at(stars, v, place, floor - SLACK, strata.size_mm[v])
    if sine < floor or sine <= 0.0:
        return False
    move_to(stars, v, place)
    return True


@kernel
def relax(field, stars, strata, good, shares, wish, place, scratch):  # type: ignore[no-untyped-def]
    """One sweep over all points, in their order: towards the mean of the neighbours, interfaces onto the tie.

    Parameters
    ----------
    field : LabelField
    stars : Stars
        Its points change in place.
    strata : Strata
    good : float
        Least sine that is good enough to give up for an even mesh, or for the tie.
    shares : (2,) float64
        Of the way to the mean that inner points and interface points go.  With 0, inner points stay and
        interface points only return to the tie.
    wish, place : (3,) float64
        Working memory.
    scratch : Scratch

    Returns
    -------
    int
        Points moved.
    """
    n_moved, points = 0, stars.points
    for v in range(points.shape[0]):
        kind, size = strata.kind[v], strata.size_mm[v]
        share = shares[1] if kind > 0 else shares[0]
        if kind < 0 or (kind == 0 and share == 0.0):
            continue
        now = star_sine(stars, v, size)
        if kind == 0 and now > 0.62:  # still as good as the lattice
            continue
        _average_shift(stars, strata, v, wish)
        for d in range(3):
            wish[d] = points[v, d] + share * wish[d]
        if kind > 0 and not project(field, wish, strata.ties, strata.normals, v, REACH * size, scratch):
            continue
        step = 1.0
        for _ in range(4):
            for d in range(3):
                place[d] = points[v, d] + step * (wish[d] - points[v, d])
            if _keep_if_good(stars, strata, v, place, min(now, good)):
                n_moved += 1
                break
            step *= 0.5
    return n_moved


@inner_kernel
def _offer(field, stars, strata, v, direction, step, slack_mm, place, wish, scratch):  # type: ignore[no-untyped-def]
    """Fill `place` with a trial position, interface points within `slack_mm` of the tie; False if none."""
    for d in range(3):
        wish[d] = stars.points[v, d] + step * direction[d]
        place[d] = wish[d]
    if strata.kind[v] == 0:
        return True
    if not project(field, place, strata.ties, strata.normals, v, REACH * strata.size_mm[v], scratch):
        return False
    away = np.sqrt((wish[0] - place[0]) ** 2 + (wish[1] - place[1]) ** 2 + (wish[2] - place[2]) ** 2)
    back = 1.0 if away <= slack_mm else slack_mm / away
    for d in range(3):
        place[d] += back * (wish[d] - place[d])
    return True


@inner_kernel
def _descend(field, stars, strata, v, now, bad, slack_mm, directions, memory, scratch):  # type: ignore[no-untyped-def]
    """Pattern search (Hooke & Jeeves 1961) for a better least sine around one point; returns steps taken."""
    size, n_steps = strata.size_mm[v], 0
    step, place, wish, best_place = 0.2 * size, memory[0], memory[1], memory[2]
    for _ in range(12):
        best = now + 2e-3
        found = False
        for r in range(directions.shape[0]):
            if not _offer(field, stars, strata, v, directions[r], step, slack_mm, place, wish, scratch):
                continue
            sine = star_sine_at(stars, v, place, best, size)
            if sine > best:
                best, found = sine, True
                for d in range(3):
                    best_place[d] = place[d]
        if found:
            now, n_steps = best, n_steps + 1
            move_to(stars, v, best_place)
        else:
            step *= 0.5
        if now >= bad or step < 0.015 * size:
            break
    return n_steps


@kernel
def search(field, stars, strata, bad, slack_mm, directions, memory, scratch):  # type: ignore[no-untyped-def]
    """Pattern search at every point whose star holds a tet with a least sine under `bad`.

    Parameters
    ----------
    bad : float
    slack_mm : float
        How far interface points may leave the tie.
    directions : (k, 3) float64
    memory : (3, 3) float64
        Working memory.

    Returns
    -------
    int
        Steps taken.
    """
    n_steps = 0
    for v in range(stars.points.shape[0]):
        if strata.kind[v] < 0:
            continue
        now = star_sine(stars, v, strata.size_mm[v])
        if now < bad:
            n_steps += _descend(field, stars, strata, v, now, bad, slack_mm, directions, memory, scratch)
    return n_steps
