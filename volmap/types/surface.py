"""A labelled triangle surface."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite


@dataclass(frozen=True, eq=False)
class Surface(Frozen):
    """Triangles between labels.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
    triangles : (m, 3) int64
        Seen from the second side, corners run counter-clockwise: the normal points from
        ``sides[:, 0]`` into ``sides[:, 1]``.
    sides : (m, 2) int64
        Label inside (the larger one) and label outside (0 = outside the body).
    """

    points: NDArray[np.float64]
    triangles: NDArray[np.int64]
    sides: NDArray[np.int64]

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        triangles = self._own("triangles", np.int64, (None, 3))
        sides = self._own("sides", np.int64, (None, 2))
        require_finite(points, "Surface.points")
        if len(sides) != len(triangles):
            raise InputError("one pair of sides a triangle", found=f"{len(sides)} for {len(triangles)}")
        if len(triangles) and (triangles.min() < 0 or triangles.max() >= len(points)):
            raise InputError("a triangle names a point that does not exist", where="Surface.triangles")

    @property
    def pairs(self) -> tuple[tuple[int, int], ...]:
        """The label pairs that occur, sorted."""
        if not len(self.sides):
            return ()
        return tuple((int(a), int(b)) for a, b in np.unique(self.sides, axis=0))

    def of_label(self, label: int) -> Surface:
        """The closed surface of one label, normals outward."""
        inside, outside = self.sides[:, 0] == label, self.sides[:, 1] == label
        flipped = self.triangles[outside][:, ::-1]
        triangles = np.concatenate([self.triangles[inside], flipped])
        sides = np.concatenate([self.sides[inside], self.sides[outside][:, ::-1]])
        return Surface(self.points, triangles, sides)
