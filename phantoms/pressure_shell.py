"""`pressure-shell`: a thick incompressible sphere inflated by pressure, the exact solution.

For an incompressible isotropic shell of rest radii A and B inflated to the inner radius a, whatever the
elastic law, ``r^3 = R^3 + a^3 - A^3`` (Green and Zerna, Theoretical Elasticity, 1954; from memory,
recomputed: the volume between two radii is kept).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .beads import strewn
from .phantom import Phantom, Points, Truth
from .scanner import Contrast, Protocol, grid_around, scanned
from .texture import Texture

LAYER_MM, OUTER_MM = 23.5, 30.0
INNER_AT_VISIT_MM = (15.0, 18.0, 22.5)
PROTOCOLS = (
    Protocol((1.2, 1.2, 1.5), "RAS"),
    Protocol((1.1, 1.1, 1.5), "LAS", (6.0, -8.0, 10.0)),
    Protocol((1.1, 1.1, 1.5), "PIR", (-9.0, 5.0, 12.0)),
)
CONTRAST = Contrast({1: "inner layer", 2: "outer layer"}, {1: 150.0, 2: 100.0})
BEADS_IN = {1: 8, 2: 16}
STORY = (
    "A thick hollow gel sphere of two layers (rest radii 15, 23.5 and 30 mm), incompressible, is inflated "
    "by pressure until its cavity has the radius 18 mm (visit 1) and 22.5 mm (visit 2). The truth is "
    "the exact solution r^3 = R^3 + a^3 - A^3, in which every volume is kept: the volume ratio is 1 "
    "everywhere. The cavity is part of the shape, not a flaw of the segmentation: each layer has one "
    "cavity and Euler number 2. A sphere does not show how it is turned: labels can determine radial "
    "positions and volume ratios, and nothing about rotation; compare beads by their distance from the "
    "centre (0, 0, 0)."
)


@dataclass(frozen=True)
class Inflation:
    """The exact inflation about the origin. Material points are positions at rest, mm.

    Parameters
    ----------
    inner_mm : tuple of float
        Radius of the cavity at each visit; the first is at rest.
    outer_mm : float
        Outer radius at rest.
    """

    inner_mm: tuple[float, ...] = INNER_AT_VISIT_MM
    outer_mm: float = OUTER_MM

    def radius(self, rest_mm: NDArray[np.float64], visit: int) -> NDArray[np.float64]:
        """(n,) radius at a visit, mm, of (n,) radii at rest."""
        return np.asarray(np.cbrt(rest_mm**3 + self.inner_mm[visit] ** 3 - self.inner_mm[0] ** 3))

    def rest_radius(self, radius_mm: NDArray[np.float64], visit: int) -> NDArray[np.float64]:
        """(n,) radius at rest, mm, of (n,) radii at a visit."""
        return np.asarray(np.cbrt(radius_mm**3 - self.inner_mm[visit] ** 3 + self.inner_mm[0] ** 3))

    def to_material(self, points: Points, visit: int) -> Points:
        radius = np.linalg.norm(points, axis=1)
        return self._scaled(points, radius, self.rest_radius(radius, visit), self._inside(radius, visit))

    def from_material(self, material: Points, visit: int) -> Points:
        radius = np.linalg.norm(material, axis=1)
        return self._scaled(material, radius, self.radius(radius, visit), self._inside(radius, 0))

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        return np.where(self._inside(np.linalg.norm(material, axis=1), 0), 1.0, np.nan)

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        radius = np.linalg.norm(material, axis=1)
        return np.where(self._inside(radius, 0), np.where(radius < LAYER_MM, 1, 2), 0).astype(np.int64)

    def _inside(self, radius_mm: NDArray[np.float64], visit: int) -> NDArray[np.bool_]:
        outer = self.radius(np.array(self.outer_mm), visit)
        slack = 1e-9  # points on the surface itself belong to the body
        return np.asarray((radius_mm >= self.inner_mm[visit] - slack) & (radius_mm <= outer + slack))

    @staticmethod
    def _scaled(
        points: Points, from_mm: NDArray[np.float64], to_mm: NDArray[np.float64], keep: NDArray[np.bool_]
    ) -> Points:
        scale = np.full(len(points), np.nan)
        scale[keep] = to_mm[keep] / from_mm[keep]
        return np.asarray(points * scale[:, None])


def make(*, seed: int = 0, voxel_mm: float | None = None) -> Phantom:
    """Three visits of the shell: at rest, inflated, inflated to one and a half of its cavity's radius."""
    random = np.random.default_rng(seed)
    motion = Inflation()
    box = np.array([[-OUTER_MM] * 3, [OUTER_MM] * 3])
    beads = strewn(motion.labels_at, box, BEADS_IN, random, depth_mm=2.0)
    texture = Texture.drawn(random)
    reach = _sphere_points() * motion.radius(np.array(OUTER_MM), len(INNER_AT_VISIT_MM) - 1)
    visits = tuple(
        scanned(
            motion,
            visit,
            grid_around(reach, protocol.cubic(voxel_mm)),
            contrast=CONTRAST,
            texture=texture,
            beads=beads,
            random=random,
            name=f"visit{visit}",
        )
        for visit, protocol in enumerate(PROTOCOLS)
    )
    return Phantom("pressure-shell", visits, Truth(motion), STORY)


def _sphere_points() -> NDArray[np.float64]:
    """(600, 3) points strewn over the unit sphere (a golden spiral)."""
    k = np.arange(600) + 0.5
    polar, turn = np.arccos(1 - 2 * k / 600), np.pi * (1 + np.sqrt(5)) * k
    return np.stack([np.sin(polar) * np.cos(turn), np.sin(polar) * np.sin(turn), np.cos(polar)], axis=1)
