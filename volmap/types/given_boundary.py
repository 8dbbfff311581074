"""A boundary correspondence from elsewhere, and what giving way to it buys."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.surface_map import Spoken, read_off
from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite
from volmap.types.surface import Surface


@dataclass(frozen=True, eq=False)
class GivenBoundary(Frozen):
    """A surface on one body's boundary, and where each of its points goes on the other's.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
        In SOURCE's world.
    triangles : (m, 3) int64, m >= 1
        Turned either way.
    images : (n, 3) float64, mm, RAS+
        In TARGET's world; linear in each triangle.
    tolerance_mm : float
        How far a point of the boundary may end from where it is given to go; above 0.
    reach_mm : float
        Points of the body's boundary farther than this from the surface are not spoken of by it.
    name : str
        Short name, for messages.
    """

    points: NDArray[np.float64]
    triangles: NDArray[np.int64]
    images: NDArray[np.float64]
    tolerance_mm: float
    reach_mm: float
    name: str = "given boundary"

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        triangles = self._own("triangles", np.int64, (None, 3))
        images = self._own("images", np.float64, (len(points), 3))
        require_finite(points, "points")
        require_finite(images, "image_mm")
        if not len(triangles):
            raise InputError("a given boundary needs triangles", where=self.name)
        if triangles.min() < 0 or triangles.max() >= len(points):
            raise InputError("a triangle names a point that does not exist", where=self.name)
        if not (self.tolerance_mm > 0 and self.reach_mm > 0):
            raise InputError(
                "the tolerance and the reach must be above 0 mm",
                where=self.name,
                found=f"{self.tolerance_mm} and {self.reach_mm}",
            )

    def spoken_of(self, surface: Surface) -> Spoken:
        """What it says of the points of a body's label surfaces, SOURCE's."""
        return read_off(
            surface.points,
            surface.triangles,
            surface.sides[:, 1] == 0,
            self.points,
            self.triangles,
            self.images,
            reach_mm=self.reach_mm,
        )

    def reversed(self) -> GivenBoundary:
        """The same correspondence asked for the other way round."""
        return replace(self, points=self.images, images=self.points)


@dataclass(frozen=True)
class GivingWay:
    """What a map costs when it may leave a given boundary by so much.

    Parameters
    ----------
    tolerance_mm : float
    kept : bool
        Every point of the boundary the surface speaks of ended within the tolerance.
    rms_mm, max_mm : float
        How far those points ended from where they were given to go, in the world the pair was solved into.
    distortion : float
        Mean distortion density of the map, by volume.
    smallest_ratio : float
        Smallest volume in TARGET over volume in SOURCE of any tet, J.
    where_mm : (3,) float
        Centre of that tet, SOURCE's world.
    """

    tolerance_mm: float
    kept: bool
    rms_mm: float
    max_mm: float
    distortion: float
    smallest_ratio: float
    where_mm: tuple[float, float, float]
