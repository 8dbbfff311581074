"""`gel-column`: a soft column with two stiffer inclusions, bent, twisted and stretched in a rig."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from . import column
from .beads import strewn
from .locate import TetLocator
from .phantom import Phantom, Points, Truth
from .scanner import Contrast, Protocol, grid_around, scanned
from .simulation import Simulation, stored
from .texture import Texture

PROTOCOLS = (
    Protocol((1.2, 1.2, 2.5), "RAS"),
    Protocol((0.9, 0.9, 2.0), "LPS", (9.0, -7.0, 14.0), 7.0),
    Protocol((0.9, 0.9, 2.0), "ARS", (-12.0, 8.0, -10.0), 8.0),
    Protocol((0.9, 0.9, 2.0), "PLI", (11.0, 13.0, 21.0), 6.5),
)
CONTRAST = Contrast(column.NAMES, {1: 110.0, 2: 190.0, 3: 65.0})
BEADS_IN = {1: 18, 2: 4, 3: 2}
STORY = (
    "A soft gel column of about 45 x 36 x 110 mm, rounded and irregular, with two stiffer inclusions "
    "and 24 beads, lies in a test rig, its foot and its top glued to plates. At visit 0 it floats in a "
    "bath of its own density. For visits 1 to 3 both plates turn, the top plate moves sideways and "
    "pulls, and the bath is drained in part, so that the column is bent, twisted, stretched and sags, "
    "by up to 25 mm. One inclusion takes up water and swells, the other dries and shrinks. The motion "
    "is a finite-element solution (scikit-fem, quadratic tetrahedra, compressible neo-Hookean gel with "
    "stress-free growth) stored in phantoms/data and made again by `python -m "
    "volmap_phantoms.simulate`. A voxel has the label of the material point at its centre, found by "
    "point location in the deformed mesh. Labels show least of what happens close to the plates, where "
    "the glue holds the gel back."
)


@dataclass(eq=False)
class MeshMotion:
    """A simulated motion: piecewise affine on tets. Material points are positions at rest, mm."""

    simulation: Simulation
    _locators: dict[int, TetLocator] = field(init=False, repr=False, default_factory=dict)

    def placed(self, visit: int) -> Points:
        """(n, 3) mesh points at a visit, mm."""
        return np.asarray(self.simulation.points + self.simulation.displacements[visit])

    def to_material(self, points: Points, visit: int) -> Points:
        return self._moved(points, visit, 0)

    def from_material(self, material: Points, visit: int) -> Points:
        return self._moved(material, 0, visit)

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        tet, _ = self._locator(0).find(material)
        ratio = self._volumes(to_visit) / self._volumes(from_visit)
        return np.where(tet >= 0, ratio[tet], np.nan)

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        inside = np.isfinite(material).all(axis=1)
        labels = np.zeros(len(material), np.int64)
        labels[inside] = column.labels_at(material[inside])
        return labels

    def _moved(self, points: Points, from_visit: int, to_visit: int) -> Points:
        tet, weights = self._locator(from_visit).find(points)
        corners = self.placed(to_visit)[self.simulation.tets[tet]]
        return np.asarray(np.einsum("nc,nci->ni", weights, corners))

    def _locator(self, visit: int) -> TetLocator:
        if visit not in self._locators:
            self._locators[visit] = TetLocator(self.placed(visit), self.simulation.tets)
        return self._locators[visit]

    def _volumes(self, visit: int) -> NDArray[np.float64]:
        corners = self.placed(visit)[self.simulation.tets]
        return np.asarray(np.linalg.det(corners[:, 1:] - corners[:, :1]) / 6)


def make(*, seed: int = 0, voxel_mm: float | None = None) -> Phantom:
    """Four visits of the column; the seed places the beads and draws texture and noise, never the motion."""
    random = np.random.default_rng(seed)
    motion = MeshMotion(stored())
    truth = Truth(motion)
    points = motion.placed(0)
    box = np.stack([points.min(axis=0), points.max(axis=0)])
    beads = strewn(lambda points: truth.labels(points, 0), box, BEADS_IN, random)
    texture = Texture.drawn(random)
    visits = tuple(
        scanned(
            motion,
            visit,
            grid_around(motion.placed(visit), protocol.cubic(voxel_mm)),
            contrast=CONTRAST,
            texture=texture,
            beads=beads,
            random=random,
            name=f"visit{visit}",
        )
        for visit, protocol in enumerate(PROTOCOLS)
    )
    return Phantom("gel-column", visits, truth, STORY)
