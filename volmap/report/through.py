"""Points through the exact map, both ways, for what the report shows."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.closest import build_tree, closest
from volmap.kernels.locate import build_buckets, locate
from volmap.kernels.tets import deformation_gradients
from volmap.kernels.topology import face_corners, match_faces
from volmap.types import VolumeMap

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class Passage:
    """The map in one direction, with what is needed to ask it quickly.

    Parameters
    ----------
    volume_map : VolumeMap
        Points go from its mesh to its images.

    Notes
    -----
    A point beside the mesh (a surface is never hit exactly) goes with the tet under the nearest face of the
    hull, extended.
    """

    def __init__(self, volume_map: VolumeMap) -> None:
        self._points = plain(np.array(volume_map.mesh.points), np.float64)
        self._images = np.array(volume_map.images)
        self._tets = plain(np.array(volume_map.mesh.tets), np.int64)

    @cached_property
    def _hull(self) -> Ints:
        return match_faces(self._tets)[2]

    def tet_of(self, points: Floats) -> tuple[Ints, NDArray[np.bool_]]:
        """The tet each point goes with, and whether it is inside it."""
        queries = plain(np.array(points, np.float64).reshape(-1, 3), np.float64)
        tet, _ = locate(build_buckets(self._points, self._tets), self._points, self._tets, queries)
        inside = tet >= 0
        if not inside.all():
            faces = face_corners(self._tets, self._hull)
            tree = build_tree(self._points, faces)
            near = closest(tree, self._points, faces, plain(queries[~inside], np.float64))[0]
            tet[~inside] = self._hull[near] // 4
        return tet, inside

    def carry(self, points: Floats) -> Floats:
        """(k, 3) where points go; those beside the mesh by the nearest tet, extended."""
        queries = np.array(points, np.float64).reshape(-1, 3)
        if not len(queries):
            return queries
        tet, _ = self.tet_of(queries)
        chosen = self._tets[tet]
        gradients = deformation_gradients(self._points, self._images, chosen)
        start = chosen[:, 0]
        return np.asarray(
            self._images[start] + np.einsum("kij,kj->ki", gradients, queries - self._points[start])
        )
