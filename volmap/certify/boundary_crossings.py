"""Gate: the outer boundary crosses nothing, no piece lies inside another, and faces join two tets at most.

With every tet positive, these make the map one-to-one: a tet's neighbours then lie on the other side of
its faces, so each piece covers evenly what its boundary encloses, and an embedded boundary encloses it
once.
"""

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
from volmap.types.certificate import Gate
from volmap.types.tetmesh import TetMesh


def boundary_crossings(evidence: Evidence, limit: Limit, *, inverted: Gate) -> Gate:
    """Count crossing pairs of boundary triangles, nested pieces and wrongly joined faces, in both worlds.

    Parameters
    ----------
    evidence : Evidence
    limit : Limit
    inverted : Gate
        `inverted_tets`: only both together make the map one-to-one.
    """
    mesh, image = evidence.map.mesh, evidence.map.image_mesh
    first, second, hull = match_faces(mesh.tets)
    triangles = face_corners(mesh.tets, hull)
    wrong = wrongly_joined(mesh.tets, first, second)
    where = [_face_place(mesh, face) for face in wrong[:MOST]]
    counts = {"crossing_pairs": 0, "nested_pieces": 0, "wrong_faces": len(wrong)}
    for space, body in {"target": image, "source": mesh}.items():
        try:
            pairs = triangle_crossings(body.points, triangles)
        except ValueError as fault:
            return not_assessed(limit, str(fault))
        nested = nested_pieces(body, (first // 4, second // 4), space=space)
        counts["crossing_pairs"] += len(pairs)
        counts["nested_pieces"] += len(nested)
        where += [_crossing_place(body, triangles[pair], space) for pair in pairs[:MOST]] + nested[:MOST]
    total = sum(counts.values())
    value = {"count": total, **counts, "triangles": len(triangles)}
    sentence = _sentence(value, positive=inverted.value["count"] == 0)
    return judged(limit, {"count": total}, value=value, sentence=sentence, where=where[:MOST])


def _sentence(value: dict[str, int], *, positive: bool) -> str:
    if value["count"]:
        return (
            f"{value['crossing_pairs']} pairs of boundary triangles cross, "
            f"{value['nested_pieces']} pieces lie inside another "
            f"and {value['wrong_faces']} faces join tets on one side: "
            "some places are covered twice."
        )
    clean = f"The {value['triangles']} boundary triangles do not cross and no piece lies inside another"
    if positive:
        return f"{clean}; with every tet positive, the map is one-to-one."
    return f"{clean}, but some tets are not positive, so the map still folds."


def wrongly_joined(
    tets: NDArray[np.int64], first: NDArray[np.int64], second: NDArray[np.int64]
) -> NDArray[np.int64]:
    """Shared faces that more than two tets share, or that two tets see from the same side.

    Parameters
    ----------
    tets : (m, 4) int64
    first, second : (k,) int64
        From `topology.match_faces`.

    Returns
    -------
    (n,) int64
        Faces, ``4 * tet + corner``.
    """
    same = _turn(face_corners(tets, first)) == _turn(face_corners(tets, second))
    return np.union1d(first[same], np.intersect1d(first, second))


def _turn(corners: NDArray[np.int64]) -> NDArray[np.bool_]:
    """(k,) parity of the order in which a face lists its corners."""
    a, b, c = corners.T
    return np.asarray((a > b) ^ (b > c) ^ (a > c))


def _face_place(mesh: TetMesh, face: int) -> dict[str, Any]:
    centre = mesh.points[face_corners(mesh.tets, np.array([face]))[0]].mean(axis=0)
    return place(centre, "source", "a face joins two tets on one side, or more than two tets")


def _crossing_place(body: TetMesh, triangles: NDArray[np.int64], space: str) -> dict[str, Any]:
    corners = body.points[triangles]
    low, high = corners.min(axis=1).max(axis=0), corners.max(axis=1).min(axis=0)
    return place((low + high) / 2, space, "two triangles of the boundary cross")


def nested_pieces(
    mesh: TetMesh, shared: tuple[NDArray[np.int64], NDArray[np.int64]], *, space: str
) -> list[dict[str, Any]]:
    """Face-connected pieces of which a tet's centre lies in a tet of another piece.

    Where no boundaries cross, one point decides for the whole piece.

    Parameters
    ----------
    mesh : TetMesh
    shared : two (k,) int64
        The two tets of each shared face.
    space : str
        'source' or 'target', for the places.

    Returns
    -------
    list of dict
        A place each.
    """
    m = len(mesh.tets)
    links = coo_array((np.ones(len(shared[0]), np.int8), shared), shape=(m, m))
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
            found.append(place(centre, space, f"piece {p} lies inside piece {piece[holders[0]]}"))
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
