"""Gate: the outer boundary crosses nothing, no part of it is buried, and faces join two tets at most.

With every tet positive, these make the map one-to-one.  Faces between tets cancel, so the tets cover a
place as often as the boundary winds around it (its degree).  That number changes by one across a triangle
of a boundary that meets nothing else, and it is 0 on the outer side of every part that is not buried: it is
0 or 1 everywhere, and a place that two points of the body shared would be covered twice nearby.

Pieces may touch at corners and edges that they share by number, in the mesh and so in its image; touching
at any other place counts as crossing.

G. H. Meisters & C. Olech, Locally one-to-one mappings and a classical theorem on schlicht functions, Duke
Math. J. 30 (1963) 63-80; for meshes Y. Lipman, Bijective mappings of meshes with boundary and the degree in
mesh processing, SIAM J. Imaging Sci. 7 (2014) (both from memory; the argument above needs neither).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.buried_boundary import buried_sheets
from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.places import MOST, place
from volmap.certify.table import Limit
from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.topology import face_corners, match_faces
from volmap.types.certificate import Gate
from volmap.types.tetmesh import TetMesh


def boundary_crossings(evidence: Evidence, limit: Limit, *, inverted: Gate) -> Gate:
    """Count crossing pairs of boundary triangles, buried parts and wrongly joined faces, in both worlds.

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
    counts = {"crossing_pairs": 0, "buried_parts": 0, "wrong_faces": len(wrong)}
    for space, body in {"target": image, "source": mesh}.items():
        try:
            pairs = triangle_crossings(body.points, triangles)
        except ValueError as fault:
            return not_assessed(limit, str(fault))
        buried = buried_sheets(body, triangles, hull // 4)
        counts["crossing_pairs"] += len(pairs)
        counts["buried_parts"] += len(buried)
        where += [_crossing_place(body, triangles[pair], space) for pair in pairs[:MOST]]
        where += [place(centre, space, f"the boundary lies inside tet {t}") for centre, t in buried[:MOST]]
    total, positive = sum(counts.values()), inverted.value["count"] == 0
    value = {"count": total, **counts, "triangles": len(triangles), "one_to_one": positive and not total}
    sentence = _sentence(value, positive=positive)
    return judged(limit, {"count": total}, value=value, sentence=sentence, where=where[:MOST])


def _sentence(value: dict[str, int], *, positive: bool) -> str:
    if value["count"]:
        return (
            f"{value['crossing_pairs']} pairs of boundary triangles cross, "
            f"{value['buried_parts']} parts of the boundary lie inside the body "
            f"and {value['wrong_faces']} faces join tets on one side: "
            "some places are covered twice."
        )
    clean = f"none of its {value['triangles']} triangles cross and no part of it lies inside the body"
    if positive:
        return (
            "The map is one-to-one: with every tet positive, a place is covered as often as the boundary "
            f"winds around it, and that is once at most, because {clean}."
        )
    return f"The boundary is sound ({clean}), but some tets are not positive, so the map still folds."


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
    opens = np.zeros(4 * len(tets), bool)
    opens[first] = True
    wrong = np.zeros(4 * len(tets), bool)
    wrong[first[same]] = True
    wrong[second[opens[second]]] = True  # the second of one pair and the first of another
    return np.flatnonzero(wrong)


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
