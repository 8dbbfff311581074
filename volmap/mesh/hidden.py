"""Finding lattice edges that step over a part of the body."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.labelfield import LabelField, Scratch, owners, voxel_changes
from volmap.kernels.lattice import bisected, edge_lengths
from volmap.kernels.topology import unique_edges

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

VOXEL_SAMPLES = 11
FIELD_SAMPLES = 5
LEAST_SHARE = 0.18  # of an edge under labels of neither end
LONGEST = 1.25  # times the wanted edge: only longer ones are halved


def _along(points: Floats, edges: Ints, n_samples: int) -> Floats:
    """(m, n_samples, 3) places spread evenly inside each edge."""
    share = (np.arange(n_samples) + 1.0) / (n_samples + 1.0)
    first, second = points[edges[:, 0]], points[edges[:, 1]]
    return np.asarray(first[:, None] + share[None, :, None] * (second - first)[:, None])


def _changes(ends: Ints, between: Ints) -> Ints:
    """(m,) how often the label changes along each edge."""
    run = np.concatenate([ends[:, :1], between, ends[:, 1:]], axis=1)
    return np.asarray((run[:, 1:] != run[:, :-1]).sum(axis=1))


def hiding_edges(
    field: LabelField, points: Floats, owner: Ints, edges: Ints, scratch: Scratch
) -> NDArray[np.bool_]:
    """(m,) edges along which the label changes more often than their ends tell.

    Voxels are asked first, the smoothed field only where they raise a doubt.
    """
    ends = owner[edges]
    told = (ends[:, 0] != ends[:, 1]).astype(np.int64)
    doubtful = np.flatnonzero(voxel_changes(field, points, owner, edges, np.int64(VOXEL_SAMPLES)) > told)
    places = _along(points, edges[doubtful], FIELD_SAMPLES)
    between = owners(field, np.ascontiguousarray(places.reshape(-1, 3)), scratch).reshape(-1, FIELD_SAMPLES)
    ends, told = ends[doubtful], told[doubtful]
    changes = _changes(ends, between)
    foreign = ((between != ends[:, :1]) & (between != ends[:, 1:])).sum(axis=1)
    wide = foreign >= LEAST_SHARE * (FIELD_SAMPLES + 1)
    hiding = np.zeros(len(edges), bool)
    hiding[doubtful] = (changes > told) & (wide | (changes > 1 + told))
    return hiding


def refined(
    field: LabelField,
    points: Floats,
    tets: Ints,
    owner: Ints,
    *,
    edge_mm: float,
    times: int,
    scratch: Scratch,
) -> tuple[Floats, Ints, Ints]:
    """The lattice with edges halved, up to `times` times, where they hide a part of the body.

    Returns
    -------
    points, tets, owner : arrays
        `owner` is the label at each point.
    """
    n_old, suspect = 0, np.zeros(len(points), np.bool_)  # ends of hiding edges
    for _ in range(3 * times):
        edges, edge_of_tet = unique_edges(tets)
        new = np.flatnonzero((edges[:, 1] >= n_old) | suspect[edges].all(axis=1))
        hiding = np.zeros(len(edges), np.bool_)
        hiding[new] = hiding_edges(field, points, owner, edges[new], scratch)
        asking = np.flatnonzero(hiding[edge_of_tet].any(axis=1))
        longest = edge_lengths(points, edges)[edge_of_tet[asking]].max(axis=1, initial=0.0)
        marked = np.zeros(len(tets), np.bool_)
        marked[asking[longest > LONGEST * edge_mm / 2**times]] = True
        if not marked.any():
            break
        n_old = len(points)
        points, tets = bisected(points, tets, edges, edge_of_tet, marked=marked)
        owner = np.r_[owner, owners(field, np.array(points[n_old:]), scratch)]
        suspect = np.zeros(len(points), np.bool_)
        suspect[edges[hiding]] = True
    return points, tets, owner
