"""Face-connected pieces of labelled tets, and specks too small to be kept."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from volmap.kernels.topology import Faces, face_corners, match_faces

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LEAST_TETS = 6
ROUNDS = 3


def pieces_of(tets: Ints, labels: Ints, *, faces: Faces | None = None) -> Ints:
    """(m,) number of the face-connected piece of one label that each tet belongs to."""
    first, second, _ = faces or match_faces(tets)
    return _components(first // 4, second // 4, labels)


def _components(first: Ints, second: Ints, labels: Ints) -> Ints:
    same = labels[first] == labels[second]
    links = coo_matrix((np.ones(same.sum(), np.int8), (first[same], second[same])), shape=(len(labels),) * 2)
    return np.asarray(connected_components(links, directed=False)[1], np.int64)


def _face_areas(points: Floats, tets: Ints, faces: Ints) -> Floats:
    p = points[face_corners(tets, faces)]
    return np.asarray(0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1))


def _label_around(piece: Ints, other: Ints, area: Floats, n_pieces: int) -> Ints:
    """(n_pieces,) the label each piece shares most area with; -1 when it is not asked for."""
    span = np.int64(other.max() + 1)
    keys, place = np.unique(piece * span + other, return_inverse=True)
    shared = np.bincount(place, area)
    order = np.lexsort((keys, -shared))
    around = np.full(n_pieces, -1, np.int64)
    around[(keys[order] // span)[::-1]] = (keys[order] % span)[::-1]  # the largest comes last and stays
    return around


def without_specks(points: Floats, tets: Ints, labels: Ints) -> tuple[Ints, int]:
    """Labels with pieces of fewer than six tets given to the label they share most area with.

    Returns
    -------
    labels : (m,) int64
    n_specks : int
    """
    shared, partner, _ = match_faces(tets)
    first, second = shared // 4, partner // 4
    labels, n_specks = labels.copy(), 0
    for _ in range(ROUNDS):
        piece = _components(first, second, labels)
        small = np.bincount(piece) < LEAST_TETS
        unlike = np.flatnonzero(labels[first] != labels[second])
        inner = np.concatenate([first[unlike], second[unlike]])
        outer = np.concatenate([second[unlike], first[unlike]])
        asked = np.flatnonzero(small[piece[inner]])
        if not len(asked):
            break
        area = _face_areas(points, tets, shared[np.tile(unlike, 2)[asked]])
        around = _label_around(piece[inner[asked]], labels[outer[asked]], area, len(small))
        swallowed = around[piece] >= 0
        labels[swallowed] = around[piece][swallowed]
        n_specks += int((around >= 0).sum())
    return labels, n_specks


def point_pieces(tets: Ints, labels: Ints) -> Ints:
    """(m,) number of the piece of one label, joined through points, that each tet belongs to."""
    span = np.int64(labels.max() + 1)
    node = np.unique(tets * span + labels[:, None], return_inverse=True)[1].reshape(-1, 4)
    n_tets = len(tets)
    links = coo_matrix(
        (np.ones(4 * n_tets, np.int8), (np.repeat(np.arange(n_tets), 4), n_tets + node.ravel())),
        shape=(n_tets + int(node.max()) + 1,) * 2,
    )
    return np.asarray(connected_components(links, directed=False)[1][:n_tets], np.int64)
