"""Which tets, faces and edges belong together."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.tets import EDGES, FACES

Ints = NDArray[np.int64]


def unique_edges(tets: Ints) -> tuple[Ints, Ints]:
    """Edges of a mesh.

    Returns
    -------
    edges : (e, 2) int64
        Each once, smaller point first, sorted.
    edge_of_tet : (m, 6) int64
        In the order of `tets.EDGES`.
    """
    pairs = np.sort(tets[:, EDGES].reshape(-1, 2), axis=1)
    n = np.int64(tets.max() + 1)
    keys, inverse = np.unique(pairs[:, 0] * n + pairs[:, 1], return_inverse=True)
    return np.stack([keys // n, keys % n], axis=1), inverse.reshape(-1, 6)


def match_faces(tets: Ints) -> tuple[Ints, Ints, Ints]:
    """Faces shared by two tets, and faces of the hull; a face is ``4 * tet + corner opposite``.

    Returns
    -------
    first, second : (k,) int64
        The two sides of each shared face.
    hull : (h,) int64
    """
    n = np.int64(tets.max() + 1)
    corners = np.sort(tets[:, FACES].reshape(-1, 3), axis=1)
    order = np.lexsort((corners[:, 2], corners[:, 0] * n + corners[:, 1]))
    ordered = corners[order]
    same = (ordered[1:] == ordered[:-1]).all(axis=1)
    begins = np.flatnonzero(same)
    lonely = np.r_[True, ~same] & np.r_[~same, True]
    return order[begins], order[begins + 1], np.sort(order[lonely])


def face_corners(tets: Ints, faces: Ints) -> Ints:
    """(k, 3) corners of the faces ``4 * tet + corner``, counter-clockwise from outside the tet."""
    return np.asarray(tets[faces // 4][np.arange(len(faces))[:, None], FACES[faces % 4]])


def interfaces(tets: Ints, labels: Ints) -> tuple[Ints, Ints]:
    """Every face between two labels or between a label and the outside.

    Returns
    -------
    triangles : (k, 3) int64
        The normal points from the larger label (inside) to the smaller one.
    sides : (k, 2) int64
        (inside, outside); 0 is outside the body.
    """
    first, second, hull = match_faces(tets)
    a, b = labels[first // 4], labels[second // 4]
    split = a != b
    inner = np.where(a > b, first, second)[split]
    triangles = np.concatenate([face_corners(tets, inner), face_corners(tets, hull)])
    sides = np.concatenate(
        [
            np.stack([np.maximum(a, b)[split], np.minimum(a, b)[split]], axis=1),
            np.stack([labels[hull // 4], np.zeros(len(hull), np.int64)], axis=1),
        ]
    )
    order = np.lexsort((triangles[:, 0], sides[:, 1], sides[:, 0]))
    return triangles[order], sides[order]


def incidence(cells: Ints, n_points: int) -> tuple[Ints, Ints]:
    """Which cells hold each point, as a compressed list.

    Returns
    -------
    start : (n_points + 1,) int64
    cell : (cells.size,) int64
        Cells of point p are ``cell[start[p]:start[p + 1]]``, ascending.
    """
    flat = cells.ravel()
    order = np.argsort(flat, kind="stable")
    start = np.zeros(n_points + 1, np.int64)
    np.cumsum(np.bincount(flat, minlength=n_points), out=start[1:])
    return start, (order // cells.shape[1]).astype(np.int64)
