"""Straight lines through a tet mesh, from face to face."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import barycentric_rows
from volmap.kernels.locate import Buckets, build_buckets, locate
from volmap.kernels.topology import match_faces

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_SAME_MM = 1e-9  # crossings nearer than this are one
_STALLED = 24  # steps without gain before a walk is set down a little farther on
_PEEK = 0.25  # of a bucket's width: how far apart a line outside the mesh looks for its way back in
_MOST_PEEKS = 4096


class _Mesh(NamedTuple):
    points: Floats
    tets: Ints
    rows: Floats
    neighbour: Ints
    buckets: Buckets


class _Walk(NamedTuple):
    """Segments on their way: number, share of the way done, tet."""

    segment: Ints
    share: Floats
    tet: Ints


def face_crossings(points: Floats, tets: Ints, start: Floats, end: Floats) -> tuple[Ints, Floats]:
    """Where straight segments go through faces of tets.

    Each segment walks from tet to tet through the face its smallest coordinate runs out at.  Outside the mesh
    it looks ahead in steps of a quarter of a bucket for where it comes in again, and walks back from there to
    the face it comes in by; a part of the mesh thinner than such a step may be missed.

    Parameters
    ----------
    points : (n, 3) float64, mm
    tets : (m, 4) int64
    start, end : (s, 3) float64, mm

    Returns
    -------
    segment : (k,) int64
        Ascending.
    share : (k,) float64
        Of the way from start to end, above 0 and below 1, ascending in each segment.  Crossings within
        1e-9 mm of an end or of another one are left out.
    """
    mesh = _prepared(points, tets)
    tet, _ = locate(mesh.buckets, points, tets, start)
    walk = _Walk(np.arange(len(start)), np.zeros(len(start)), tet)
    found: list[tuple[Ints, Floats]] = [(np.empty(0, np.int64), np.empty(0))]
    while len(walk.segment):
        crossed, left = _walked(mesh, start, end, walk)
        walk = _coming_in_again(mesh, start, end, left)
        back = _Walk(walk.segment, 1 - walk.share, walk.tet)
        homeward, _ = _walked(mesh, end, start, back, until=1 - _share_of(left, walk.segment))
        found += [*crossed, *((segment, 1 - share) for segment, share in homeward)]
    segment, share = (np.concatenate(column) for column in zip(*found, strict=True))
    return _tidied(segment, share, np.linalg.norm(end - start, axis=1))


def _prepared(points: Floats, tets: Ints) -> _Mesh:
    first, second, _ = match_faces(tets)
    neighbour = np.full(4 * len(tets), -1)
    neighbour[first], neighbour[second] = second, first
    return _Mesh(points, tets, barycentric_rows(points, tets), neighbour, build_buckets(points, tets))


def _share_of(walk: _Walk, segments: Ints) -> Floats:
    """Shares of a walk, for some of its segments (ascending in both)."""
    return walk.share[np.searchsorted(walk.segment, segments)]


def _walked(
    mesh: _Mesh, start: Floats, end: Floats, walk: _Walk, until: Floats | None = None
) -> tuple[list[tuple[Ints, Floats]], _Walk]:
    """Walk every segment to its end (or to a share of its way) or out of the mesh.

    Returns the crossings, and the segments that left before their end with the share at which they did.
    """
    segment, share, tet = walk
    until = np.ones(len(segment)) if until is None else until
    came_by, stalls = np.full(len(tet), -1), np.zeros(len(tet), np.int64)
    crossed, left = [], [_Walk(segment[tet < 0], share[tet < 0], tet[tet < 0])]
    kept = np.flatnonzero(tet >= 0)
    while len(kept):
        segment, share, tet, until = segment[kept], share[kept], tet[kept], until[kept]
        came_by, stalls = came_by[kept], stalls[kept]
        leaves, face = _exits(mesh, start[segment], end[segment], tet, came_by)
        leaves = np.maximum(leaves, share)
        stalls = np.where(leaves - share > 1e-12, 0, stalls + 1)
        onward = leaves < until
        crossed.append((segment[onward], leaves[onward]))
        behind = mesh.neighbour[4 * tet + face]
        share, tet, came_by = leaves, np.where(behind < 0, -1, behind // 4), behind % 4
        out = onward & (tet < 0)
        left.append(_Walk(segment[out], share[out], tet[out]))
        stuck = np.flatnonzero(onward & ~out & (stalls > _STALLED))
        if len(stuck):
            share[stuck], tet[stuck] = _set_down(
                mesh, start[segment[stuck]], end[segment[stuck]], share[stuck]
            )
            came_by[stuck], stalls[stuck] = -1, 0
            fell = stuck[tet[stuck] < 0]
            left.append(_Walk(segment[fell], share[fell], tet[fell]))
        kept = np.flatnonzero(onward & (tet >= 0))
    parts = _Walk(*(np.concatenate(column) for column in zip(*left, strict=True)))
    order = np.argsort(parts.segment, kind="stable")
    return crossed, _Walk(parts.segment[order], parts.share[order], parts.tet[order])


def _exits(mesh: _Mesh, start: Floats, end: Floats, tet: Ints, came_by: Ints) -> tuple[Floats, Ints]:
    """The share at which each segment leaves its tet, and the corner opposite the face it leaves by."""
    rows = mesh.rows[tet]
    value, slope = np.empty((len(tet), 4)), np.empty((len(tet), 4))
    value[:, 1:] = np.einsum("srd,sd->sr", rows[:, :3], start - rows[:, 3])
    slope[:, 1:] = np.einsum("srd,sd->sr", rows[:, :3], end - start)
    value[:, 0], slope[:, 0] = 1 - value[:, 1:].sum(axis=1), -slope[:, 1:].sum(axis=1)
    falling = slope < 0
    inside = np.flatnonzero(came_by >= 0)
    falling[inside, came_by[inside]] = False
    shares = np.where(falling, value / np.where(falling, -slope, 1.0), np.inf)
    face = shares.argmin(axis=1)
    return shares[np.arange(len(tet)), face], face


def _set_down(mesh: _Mesh, start: Floats, end: Floats, share: Floats) -> tuple[Floats, Ints]:
    """A place 1e-6 of a bucket farther on, for walks that go round and round an edge or a corner."""
    length = np.maximum(np.linalg.norm(end - start, axis=1), 1e-300)
    share = np.minimum(share + 1e-6 * mesh.buckets.width_mm / length, 1.0)
    place = start + share[:, None] * (end - start)
    return share, locate(mesh.buckets, mesh.points, mesh.tets, place)[0]


def _coming_in_again(mesh: _Mesh, start: Floats, end: Floats, left: _Walk) -> _Walk:
    """For each segment that is outside, the first place ahead that is inside; those without one are done."""
    rest = (1 - left.share) * np.linalg.norm(end - start, axis=1)[left.segment]
    n_peeks = np.clip(np.ceil(rest / (_PEEK * mesh.buckets.width_mm)), 1, _MOST_PEEKS).astype(np.int64)
    share, tet = np.ones(len(rest)), np.full(len(rest), -1)
    ahead = np.arange(len(rest))
    for peek in range(1, int(n_peeks.max(initial=0)) + 1):
        ahead = ahead[(tet[ahead] < 0) & (n_peeks[ahead] >= peek)]
        if not len(ahead):
            break
        here = left.share[ahead] + (1 - left.share[ahead]) * (peek / n_peeks[ahead])
        own = left.segment[ahead]
        place = start[own] + here[:, None] * (end[own] - start[own])
        tet[ahead] = locate(mesh.buckets, mesh.points, mesh.tets, place)[0]
        share[ahead] = here
    again = tet >= 0
    return _Walk(left.segment[again], share[again], tet[again])


def _tidied(segment: Ints, share: Floats, length: Floats) -> tuple[Ints, Floats]:
    """Sorted, without the ends and without repetitions."""
    far = _SAME_MM / np.maximum(length, 1e-300)
    inner = (share > far[segment]) & (share < 1 - far[segment])
    segment, share = segment[inner], share[inner]
    order = np.lexsort((share, segment))
    segment, share = segment[order], share[order]
    new = np.ones(len(share), bool)
    new[1:] = (segment[1:] != segment[:-1]) | (share[1:] - share[:-1] > far[segment[1:]])
    return segment[new], share[new]
