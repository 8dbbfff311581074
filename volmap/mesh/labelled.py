"""Lattice, snap, split, label: from a field to conforming labelled tets with a background ring."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.labelfield import LabelField, Scratch, cut_edges, owners
from volmap.kernels.lattice import bcc, edge_lengths, oriented, rank_of, split_edges, used_only
from volmap.kernels.snap import MOST_TIES, add_labels, disjoint, snap
from volmap.kernels.stars import new_stars
from volmap.kernels.tets import signed_volumes
from volmap.kernels.topology import unique_edges
from volmap.mesh.hidden import refined
from volmap.mesh.nearby import near_body
from volmap.mesh.specks import without_specks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

CELL = 1.08  # cube of the lattice, in wanted edges
ORIGIN = np.array([0.37, 0.41, 0.43])  # of a cell: keeps lattice points off the planes of voxels
REACH = 1.25  # cells around the voxels of the body: the ring ends one edge (at most a cell) beyond the body
SNAP_ROUNDS = 3
SNAP_SHARE = 0.30  # of an edge: crossings nearer than this to an end draw it
SHORT_BONUS = 1.15  # for the shorter edges of the lattice
LEAST_VOLUME = 0.04  # of its own that a tet must keep when its points snap
NEAREST_SPLIT = 0.12  # of an edge, from either end


class Complex(NamedTuple):
    """Labelled tets in the mesher's frame, label 0 being the background ring.

    Attributes
    ----------
    points : (n, 3) float64, mm
    tets : (m, 4) int64
    labels : (m,) int64
    """

    points: Floats
    tets: Ints
    labels: Ints


def lattice_edge(volume_mm3: float, n_tets: int) -> float:
    """Edge that gives about `n_tets` tets in a body of that volume, mm; interfaces add a quarter."""
    return float((12 * 1.25 * volume_mm3 / n_tets) ** (1 / 3) / CELL)


def lattice_size(volume_mm3: float, edge_mm: float) -> float:
    """Tets to expect in a body of that volume."""
    return 12 * 1.25 * volume_mm3 / (CELL * edge_mm) ** 3


def labelled_lattice(
    field: LabelField, edge_mm: float, *, refine: int, scratch: Scratch
) -> tuple[Complex, int]:
    """Conforming labelled tets, not yet improved.

    Returns
    -------
    complex : Complex
        Without tets when no lattice point falls into the body.
    n_specks : int
        Tiny pieces that took the label around them.
    """
    points, tets = _lattice_near_body(field, edge_mm)
    owner = owners(field, points, scratch)
    points, tets, owner = refined(field, points, tets, owner, edge_mm=edge_mm, times=refine, scratch=scratch)
    if not (owner > 0).any():
        return Complex(points[:0], tets[:0], owner[:0]), 0
    points, tets, owner = _with_ring(points, tets, owner)
    sets = np.full((len(points), MOST_TIES), -1, np.int64)
    sets[:, 0] = owner
    cuts = _no_cuts_yet(tets)
    points = _snapped(field, points, tets, sets, cuts, scratch)
    points, tets, sets = _split_at_crossings(field, points, tets, sets, cuts, scratch)
    labels = _labels_of_tets(field, points, tets, sets, scratch)
    labels, n_specks = without_specks(points, tets, labels)
    return Complex(points, tets, labels), n_specks


def _lattice_near_body(field: LabelField, edge_mm: float) -> tuple[Floats, Ints]:
    """The tets of the lattice that lie near the body."""
    cell = CELL * edge_mm
    body = field.labels > 0
    spans = [np.flatnonzero(body.any(axis=tuple({0, 1, 2} - {axis}))) for axis in range(3)]
    low = (np.array([span[0] for span in spans]) - 0.5) * field.spacing - cell * (2.0 + ORIGIN)
    high = (np.array([span[-1] for span in spans]) + 0.5) * field.spacing + 2.0 * cell
    points, tets = bcc(low, high, cell, lambda places: near_body(field, places, REACH * cell))
    points, tets, _ = used_only(points, tets)
    return points, tets


def _with_ring(points: Floats, tets: Ints, owner: Ints) -> tuple[Floats, Ints, Ints]:
    """Tets that touch the body, and all tets that touch one of those."""
    touched = np.zeros(len(points), bool)
    touched[tets[(owner[tets] > 0).any(axis=1)]] = True
    points, tets, kept = used_only(points, tets[touched[tets].any(axis=1)])
    return points, tets, owner[kept]


class _Cuts(NamedTuple):
    """Where edges leave the labels of their ends, seen from both ends.

    Attributes
    ----------
    edges : (e, 2) int64
    edge_of_tet : (m, 6) int64
    where : (2, e) float64
        Share of the edge from the end it is seen from; NaN while nobody has looked.
    labels : (2, e, 2) int64
        The label left and the one entered (-1 when it does not change).
    """

    edges: Ints
    edge_of_tet: Ints
    where: Floats
    labels: Ints


def _no_cuts_yet(tets: Ints) -> _Cuts:
    edges, edge_of_tet = unique_edges(tets)
    unknown, none = np.full((2, len(edges)), np.nan), np.full((2, len(edges), 2), -1, np.int64)
    return _Cuts(edges, edge_of_tet, unknown, none)


def _look(field: LabelField, points: Floats, sets: Ints, cuts: _Cuts, scratch: Scratch) -> Ints:
    """Numbers of the edges whose ends have no label in common; `cuts` is filled in for them."""
    crossing = np.flatnonzero(disjoint(sets, cuts.edges))
    new = crossing[np.isnan(cuts.where[0, crossing])]
    ahead = cuts.edges[new]
    for way, pairs in enumerate((ahead, np.ascontiguousarray(ahead[:, ::-1]))):
        cuts.where[way, new], cuts.labels[way, new] = cut_edges(field, points, sets, pairs, scratch)
    return crossing


def _reaches(points: Floats, edges: Ints, edge_of_tet: Ints) -> Floats:
    """(e,) share of each edge within which a crossing draws its end."""
    lengths = edge_lengths(points, edges)
    longest = np.zeros(len(edges))
    np.maximum.at(longest, edge_of_tet.ravel(), np.repeat(lengths[edge_of_tet].max(axis=1), 6))
    return np.where(lengths >= 0.93 * longest, SNAP_SHARE, SNAP_SHARE * SHORT_BONUS)


def _snapped(
    field: LabelField, points: Floats, tets: Ints, sets: Ints, cuts: _Cuts, scratch: Scratch
) -> Floats:
    """Points with those near a crossing moved onto it; their label sets grow in place."""
    reach = _reaches(points, cuts.edges, cuts.edge_of_tet)
    stars = new_stars(points, tets, np.ones(len(tets), np.int64))
    floors = LEAST_VOLUME * 6.0 * signed_volumes(points, tets)
    moved = np.zeros(len(points), np.int64)
    for _ in range(SNAP_ROUNDS):
        crossing = _look(field, stars.points, sets, cuts, scratch)
        pairs, where, labels = cuts.edges[crossing], cuts.where[:, crossing], cuts.labels[:, crossing]
        movers = np.concatenate([pairs[:, 0], pairs[:, 1]])
        others = np.concatenate([pairs[:, 1], pairs[:, 0]])
        urgency = (where / reach[crossing]).ravel()
        crossed = (labels[:, :, 1] >= 0).all(axis=0)
        chosen = np.flatnonzero(np.tile(crossed, 2) & (urgency < 1.0))
        chosen = chosen[np.lexsort((movers[chosen], urgency[chosen]))]
        start, end = stars.points[movers[chosen]], stars.points[others[chosen]]
        places = start + where.ravel()[chosen, None] * (end - start)
        moved[moved == 2] = 1
        done = snap(stars, movers[chosen], places, floors=floors, moved=moved)
        if not done.any():
            break
        add_labels(sets, movers[chosen][done], labels[:, :, 1].ravel()[chosen][done])
        cuts.where[:, (moved == 2)[cuts.edges].any(axis=1)] = np.nan
    return stars.points


def _split_at_crossings(
    field: LabelField, points: Floats, tets: Ints, sets: Ints, cuts: _Cuts, scratch: Scratch
) -> tuple[Floats, Ints, Ints]:
    """Split the edges whose ends have no label in common where the label changes."""
    crossing = _look(field, points, sets, cuts, scratch)
    if not len(crossing):
        return points, tets, sets
    pairs, where, labels = cuts.edges[crossing], cuts.where[:, crossing], cuts.labels[:, crossing]
    ahead, back = where[0], 1.0 - where[1]
    nearer = np.where(np.abs(ahead - 0.5) < np.abs(back - 0.5), ahead, back)
    share = np.where(labels[0, :, 1] == labels[1, :, 1], ahead, nearer)
    share = np.clip(share, NEAREST_SPLIT, 1.0 - NEAREST_SPLIT)[:, None]
    new_points = (1.0 - share) * points[pairs[:, 0]] + share * points[pairs[:, 1]]
    new_sets = np.full((len(pairs), sets.shape[1]), -1, np.int64)
    new_sets[:, 0] = np.where(labels[0, :, 0] >= 0, labels[0, :, 0], sets[pairs[:, 0], 0])
    entered = np.where(labels[0, :, 1] >= 0, labels[0, :, 1], sets[pairs[:, 1], 0])
    add_labels(new_sets, np.arange(len(pairs)), entered)
    middle = np.full(len(cuts.edges), -1, np.int64)
    middle[crossing] = len(points) + np.arange(len(pairs))
    rank = rank_of(middle >= 0, edge_lengths(points, cuts.edges))
    pieces, _ = split_edges(tets, cuts.edges, cuts.edge_of_tet, middle=middle, rank=rank)
    all_points = np.concatenate([points, new_points])
    return all_points, oriented(all_points, pieces), np.concatenate([sets, new_sets])


def _labels_of_tets(field: LabelField, points: Floats, tets: Ints, sets: Ints, scratch: Scratch) -> Ints:
    """The one label common to all four points, else the label at the centre of the tet."""
    first = sets[tets[:, 0]]
    common = first >= 0
    for corner in range(1, 4):
        common &= (first[:, :, None] == sets[tets[:, corner]][:, None, :]).any(axis=2)
    labels = first[np.arange(len(tets)), common.argmax(axis=1)]
    unclear = np.flatnonzero(common.sum(axis=1) != 1)
    labels[unclear] = owners(field, points[tets[unclear]].mean(axis=1), scratch)
    return np.asarray(labels)
