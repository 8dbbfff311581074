"""Gate: the image of the outer boundary crosses nothing, and no piece lies inside another."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import MOST, place
from volmap.certify.table import Limit
from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.predicates import orientation_signs
from volmap.kernels.topology import face_corners, match_faces
from volmap.types.certificate import Gate, Verdict
from volmap.types.tetmesh import TetMesh


def boundary_crossings(evidence: Evidence, limit: Limit, *, inverted: Gate) -> Gate:
    """Count crossing pairs of boundary triangles of the image, and pieces that lie inside another.

    Parameters
    ----------
    evidence : Evidence
    limit : Limit
    inverted : Gate
        `inverted_tets`: only both together make the map one-to-one.
    """
    image = evidence.map.image_mesh
    first, second, hull = match_faces(image.tets)
    triangles = face_corners(image.tets, hull)
    try:
        pairs = triangle_crossings(image.points, triangles)
    except ValueError as fault:
        return not_assessed(limit, str(fault))
    nested = nested_pieces(image, first // 4, second // 4)
    count = len(pairs) + len(nested)
    value = {
        "count": count,
        "crossing_pairs": len(pairs),
        "nested_pieces": len(nested),
        "triangles": len(triangles),
    }
    where = [_crossing_place(image, triangles[p]) for p in pairs[:MOST]] + nested[:MOST]
    sentence = _sentence(value, positive=inverted.verdict is Verdict.PASS)
    return judged(limit, {"count": count}, value=value, sentence=sentence, where=where[:MOST])


def _sentence(value: dict[str, int], *, positive: bool) -> str:
    if value["count"]:
        return (
            f"{value['crossing_pairs']} pairs of boundary triangles of the image cross and "
            f"{value['nested_pieces']} pieces lie inside another: the image covers some places twice."
        )
    clean = (
        f"The {value['triangles']} boundary triangles of the image do not cross "
        "and no piece lies inside another"
    )
    if positive:
        return f"{clean}; with every tet positive, the map is one-to-one."
    return f"{clean}, but some tets are not positive, so this does not make the map injective."


def _crossing_place(image: TetMesh, triangles: NDArray[np.int64]) -> dict[str, Any]:
    corners = image.points[triangles]
    low, high = corners.min(axis=1).max(axis=0), corners.max(axis=1).min(axis=0)
    return place((low + high) / 2, "target", "two triangles of the image's boundary cross")


def nested_pieces(mesh: TetMesh, first: NDArray[np.int64], second: NDArray[np.int64]) -> list[dict[str, Any]]:
    """Face-connected pieces of which a tet's centre lies in a tet of another piece.

    Where no boundaries cross, one point decides for the whole piece.

    Parameters
    ----------
    mesh : TetMesh
        The image.
    first, second : (k,) int64
        The two tets of each shared face.

    Returns
    -------
    list of dict
        A place each.
    """
    m = len(mesh.tets)
    links = coo_array((np.ones(len(first), np.int8), (first, second)), shape=(m, m))
    n_pieces, piece = connected_components(links, directed=False)
    if n_pieces == 1:
        return []
    corners = mesh.points[mesh.tets]
    low, high = corners.min(axis=1), corners.max(axis=1)
    found = []
    for p in range(n_pieces):
        centre = corners[np.flatnonzero(piece == p)[0]].mean(axis=0)
        near = np.flatnonzero((piece != p) & (low <= centre).all(axis=1) & (centre <= high).all(axis=1))
        holders = near[_holds(corners[near], centre)]
        if len(holders):
            found.append(
                place(centre, "target", f"piece {p} of the image lies inside piece {piece[holders[0]]}")
            )
    return found


def _holds(corners: NDArray[np.float64], centre: NDArray[np.float64]) -> NDArray[np.bool_]:
    """(k,) True where the closed tet, positive or not, holds the centre; by exact signs."""
    k = len(corners)
    points = np.concatenate([corners.reshape(-1, 3), centre[None]])
    tets = np.arange(4 * k).reshape(k, 4)
    signs = np.empty((k, 4), np.int8)
    for a in range(4):
        swapped = tets.copy()
        swapped[:, a] = 4 * k
        signs[:, a] = orientation_signs(points, swapped)
    return np.asarray((signs >= 0).all(axis=1) | (signs <= 0).all(axis=1))
