"""A labelled tetrahedral mesh."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import tets as tet_kernels
from volmap.kernels import topology
from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite
from volmap.types.surface import Surface


@dataclass(frozen=True, eq=False)
class TetMesh(Frozen):
    """Conforming tetrahedra, each with one label above 0.

    The reference tet has its corners at the origin and at the ends of x, y and z; a positive tet
    is one whose corners 1, 2, 3 run counter-clockwise seen from outside, volume
    ``det[p1 - p0, p2 - p0, p3 - p0] / 6 > 0``::

            3
            |\\
            | \\
            0--2
           /  /
          1

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
    tets : (m, 4) int64
    labels : (m,) int64

    Raises
    ------
    InputError
        Points not finite, a tet that names a missing point, a label below 1.  Signs are not checked
        here: that is the certificate's task.
    """

    points: NDArray[np.float64]
    tets: NDArray[np.int64]
    labels: NDArray[np.int64]

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        tets = self._own("tets", np.int64, (None, 4))
        labels = self._own("labels", np.int64, (None,))
        require_finite(points, "TetMesh.points")
        if len(labels) != len(tets) or not len(tets):
            raise InputError(
                "a mesh needs tets and one label each", found=f"{len(tets)} tets, {len(labels)} labels"
            )
        if tets.min() < 0 or tets.max() >= len(points):
            raise InputError("a tet names a point that does not exist", where="TetMesh.tets")
        if labels.min() < 1:
            raise InputError("labels of tets start at 1", where="TetMesh.labels", found=str(labels.min()))

    @cached_property
    def volumes(self) -> NDArray[np.float64]:
        """(m,) signed volumes, mm3."""
        return tet_kernels.signed_volumes(self.points, self.tets)

    @cached_property
    def interfaces(self) -> Surface:
        """Every face between two labels, and between a label and the outside."""
        triangles, sides = topology.interfaces(self.tets, self.labels)
        return Surface(self.points, triangles, sides)

    @property
    def present(self) -> tuple[int, ...]:
        """The labels that occur, ascending."""
        return tuple(int(v) for v in np.unique(self.labels))

    def volume_of(self, label: int) -> float:
        """Volume of one label, mm3."""
        return float(self.volumes[self.labels == label].sum())

    def moved(self, points: NDArray[np.float64]) -> TetMesh:
        """The same tets with their points elsewhere."""
        return TetMesh(points, self.tets, self.labels)
