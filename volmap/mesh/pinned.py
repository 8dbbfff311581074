"""Giving an inner point to every tet whose four corners all lie on the boundary of its label.

Such a tet is held by the boundary alone: a map that moves the boundary could flatten it and nothing inside
could give way.  An edge that runs through the inside of the label is bisected, together with all tets around
it; a tet without such an edge is split in four from a point inside.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.lattice import edge_lengths, longest_first, split_edges
from volmap.kernels.strata import label_interfaces, triangle_edges
from volmap.kernels.topology import Faces, unique_edges
from volmap.mesh.labelled import Complex

Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]


def _on_interfaces(complex_: Complex) -> tuple[Flags, Ints]:
    """(n,) points that interfaces hold, and the (e, 2) edges that interfaces hold."""
    triangles, _ = label_interfaces(complex_.tets, complex_.labels)
    held = np.zeros(len(complex_.points), bool)
    held[triangles] = True
    return held, triangle_edges(triangles, len(complex_.points))[0]


def pinned_tets(complex_: Complex, *, faces: Faces | None = None) -> Flags:
    """(m,) True for labelled tets whose four corners all lie on interfaces."""
    held = np.zeros(len(complex_.points), bool)
    held[label_interfaces(complex_.tets, complex_.labels, faces)[0]] = True
    return np.asarray((complex_.labels > 0) & held[complex_.tets].all(axis=1))


def _first_in_all(rank: Ints, wanted: Flags, edge_of_tet: Ints) -> Flags:
    """(e,) wanted edges that come first in every tet they belong to: no tet holds two of them."""
    place = np.where(wanted, rank, np.iinfo(np.int64).max)
    first = place[edge_of_tet].min(axis=1)
    beaten = np.zeros(len(rank), bool)
    beaten[edge_of_tet[place[edge_of_tet] > first[:, None]]] = True
    return np.asarray(wanted & ~beaten)


def _bisected_inside(complex_: Complex, pinned: Flags, surface: Ints) -> Complex:
    """Bisect inner edges of pinned tets: those that free most tets first, then the longest.

    Parameters
    ----------
    surface : (e,) int64
        Edges on interfaces, as ``first * n_points + second``.

    Returns
    -------
    Complex
        The same one when no pinned tet has an inner edge.
    """
    points, n = complex_.points, np.int64(len(complex_.points))
    edges, edge_of_tet = unique_edges(complex_.tets)
    n_freed = np.bincount(edge_of_tet[pinned].ravel(), minlength=len(edges))
    n_freed[np.isin(edges[:, 0] * n + edges[:, 1], surface)] = 0
    longest = longest_first(edge_lengths(points, edges))
    rank = np.empty(len(edges), np.int64)
    rank[np.lexsort((longest, -n_freed))] = np.arange(len(edges))
    chosen = _first_in_all(rank, n_freed > 0, edge_of_tet)
    middle = np.full(len(edges), -1, np.int64)
    middle[chosen] = n + np.arange(chosen.sum())
    tets, parent = split_edges(complex_.tets, edges, edge_of_tet, middle=middle, rank=rank)
    halves = points[edges[chosen]].mean(axis=1)
    return Complex(np.concatenate([points, halves]), tets, complex_.labels[parent])


def _split_in_four(complex_: Complex, pinned: Flags) -> Complex:
    """A point at the centre of each pinned tet, joined to its four faces."""
    old = complex_.tets[pinned]
    new = len(complex_.points) + np.arange(len(old))
    pieces = np.repeat(old[:, None], 4, axis=1)
    pieces[:, np.arange(4), np.arange(4)] = new[:, None]
    centres = complex_.points[old].mean(axis=1)
    return Complex(
        np.concatenate([complex_.points, centres]),
        np.concatenate([complex_.tets[~pinned], pieces.reshape(-1, 4)]),
        np.concatenate([complex_.labels[~pinned], np.repeat(complex_.labels[pinned], 4)]),
    )


def _freed_all(part: Complex, held: Flags, surface: Ints) -> Complex:
    """Bisect until every tet has a corner that interfaces do not hold; new points are never held."""
    while True:
        is_held = np.r_[held, np.zeros(len(part.points) - len(held), bool)]
        pinned = (part.labels > 0) & is_held[part.tets].all(axis=1)
        if not pinned.any():
            return part
        n = np.int64(len(part.points))
        after = _bisected_inside(part, pinned, surface[:, 0] * n + surface[:, 1])
        part = _split_in_four(part, pinned) if len(after.tets) == len(part.tets) else after


def freed(complex_: Complex) -> Complex:
    """The complex without pinned tets; interfaces are as they were, tets stay positive.

    Only tets with two corners at pinned tets can hold an edge that is bisected: the others are set aside.
    """
    held, surface = _on_interfaces(complex_)
    pinned = (complex_.labels > 0) & held[complex_.tets].all(axis=1)
    corner = np.zeros(len(complex_.points), bool)
    corner[complex_.tets[pinned]] = True
    near = corner[complex_.tets].sum(axis=1) >= 2
    part = Complex(complex_.points, complex_.tets[near], complex_.labels[near])
    if not pinned.any():
        return complex_
    part = _freed_all(part, held, surface)
    return Complex(
        part.points,
        np.concatenate([complex_.tets[~near], part.tets]),
        np.concatenate([complex_.labels[~near], part.labels]),
    )
