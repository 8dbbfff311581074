"""Gate: every tet positive, in the mesh and in its image, by exact signs."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged
from volmap.certify.places import MOST, place
from volmap.certify.table import Limit
from volmap.kernels.predicates import orientation_signs
from volmap.types.certificate import Gate
from volmap.types.tetmesh import TetMesh


def inverted_tets(evidence: Evidence, limit: Limit) -> Gate:
    """Count tets whose exact orientation is not positive."""
    bodies = {"source": evidence.map.mesh, "target": evidence.map.image_mesh}
    signs = {space: orientation_signs(mesh.points, mesh.tets) for space, mesh in bodies.items()}
    counts = {space: int((s <= 0).sum()) for space, s in signs.items()}
    where = [p for space, mesh in bodies.items() for p in _places(mesh, signs[space], space)]
    total = len(evidence.map.mesh.tets)
    bad = sum(counts.values())
    if bad == 0:
        sentence = f"No tet is inverted: the orientation of all {total} tets and of their images is positive."
    else:
        sentence = (
            f"{counts['source']} tets of the mesh and {counts['target']} of their images, of {total}, "
            "are flat or inverted: the map is folded there."
        )
    value = {"count": bad, "in_mesh": counts["source"], "in_image": counts["target"], "tets": total}
    return judged(limit, {"count": bad}, value=value, sentence=sentence, where=where[:MOST])


def _places(mesh: TetMesh, signs: NDArray[np.int8], space: str) -> list[dict[str, Any]]:
    bad = np.flatnonzero(signs <= 0)
    worst = bad[np.argsort(mesh.volumes[bad], kind="stable")][:MOST]
    word = {0: "flat", -1: "inverted"}
    centres = mesh.points[mesh.tets[worst]].mean(axis=1)
    return [
        place(c, space, f"tet {t} (label {mesh.labels[t]}) is {word[int(signs[t])]}")
        for t, c in zip(worst, centres, strict=True)
    ]
