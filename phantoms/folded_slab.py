"""`folded-slab`: a thick bent slab that unbends, the exact solution of finite bending.

Pure flexure of an incompressible block (Rivlin, Phil. Trans. R. Soc. A 242:173, 1949; from memory,
recomputed): a block of thickness T (along X) and length L (along Y) bent through the angle alpha, g = alpha
/ L, becomes

    r^2 = 2 X / g + c,    theta = g Y,    z = Z,        J = (dr/dX) (r g) = 1.

For a neo-Hookean block whose two curved faces carry no load, the radial stress mu/2 (g^2 r^2 + 1/(g^2 r^2))
+ constant is equal on both, so the radii of the faces satisfy ``r_inner r_outer = 1/g^2``, which fixes c.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .beads import strewn
from .inclusion import Inclusion
from .phantom import Phantom, Points, Truth
from .scanner import Contrast, Protocol, grid_around, scanned
from .texture import Texture

THICK_MM, LONG_MM, DEEP_MM = 26.0, 112.0, 46.0
BEND_DEG = (150.0, 75.0, 0.0)
PROTOCOLS = (
    Protocol((1.2, 1.2, 1.8), "RAS"),
    Protocol((1.1, 1.1, 2.0), "LSA", (7.0, 10.0, -12.0)),
    Protocol((1.1, 1.1, 2.0), "SPR", (-8.0, 6.0, 15.0)),
)
NAMES = {1: "gel", 2: "rod", 3: "knob"}
CONTRAST = Contrast(NAMES, {1: 110.0, 2: 170.0, 3: 60.0})
PARTS = {
    2: Inclusion((1.0, -20.0, 5.0), (6.0, 24.0, 8.0), (8.0, 0.0, 6.0), 2.5),
    3: Inclusion((-1.0, 30.0, -7.0), (6.0, 9.0, 7.0), (0.0, 15.0, 20.0), 2.0),
}
BEADS_IN = {1: 18, 2: 4, 3: 2}
STORY = (
    "A thick, rounded slab of incompressible gel, about 26 x 112 x 46 mm when flat, with a rod and a "
    "knob of gel of another colour inside, is bent through 150 degrees at visit 0, 75 degrees at visit "
    "1 and lies flat at visit 2. The truth is the exact solution of finite bending (Rivlin 1949): r^2 = "
    "2 X / g + c, theta = g Y, every volume kept. The rounded body is cut from that block in thought: "
    "it moves exactly so when its rim carries the forces of the gel that was cut away. All parts are of "
    "one stiffness, as the exact solution asks."
)


@dataclass(frozen=True)
class Flexure:
    """The exact bending. Material points are positions in the flat slab, mm, centred on the origin.

    Parameters
    ----------
    bend_deg : tuple of float
        Angle the whole length is bent through, at each visit.
    """

    bend_deg: tuple[float, ...] = BEND_DEG

    def _curvature(self, visit: int) -> float:
        """g, radian/mm."""
        return float(np.radians(self.bend_deg[visit]) / LONG_MM)

    def faces_mm(self, visit: int) -> tuple[float, float]:
        """Radii of the inner and outer face: ``r_o^2 - r_i^2 = 2 T / g`` and ``r_i r_o = 1 / g^2``."""
        g = self._curvature(visit)
        inner_squared = (-2 * THICK_MM / g + np.sqrt((2 * THICK_MM / g) ** 2 + 4 / g**4)) / 2
        return float(np.sqrt(inner_squared)), float(np.sqrt(inner_squared + 2 * THICK_MM / g))

    def bent(self, material: Points, visit: int) -> Points:
        """(n, 3) places of any material points, whether in the body or not; x = r cos theta - 1/g."""
        g = self._curvature(visit)
        if g == 0:
            return material.copy()
        inner, outer = self.faces_mm(visit)
        x, y, z = material.T
        r = np.sqrt(2 * x / g + (inner**2 + outer**2) / 2)
        return np.stack([r * np.cos(g * y) - 1 / g, r * np.sin(g * y), z], axis=1)

    def unbent(self, points: Points, visit: int) -> Points:
        """(n, 3) material points that are at any places, whether in the body or not."""
        g = self._curvature(visit)
        if g == 0:
            return points.copy()
        inner, outer = self.faces_mm(visit)
        x, y, z = points.T
        x = x + 1 / g
        material_x = g / 2 * (x**2 + y**2 - (inner**2 + outer**2) / 2)
        return np.stack([material_x, np.arctan2(y, x) / g, z], axis=1)

    def to_material(self, points: Points, visit: int) -> Points:
        return _kept(self.unbent(points, visit))

    def from_material(self, material: Points, visit: int) -> Points:
        return self.bent(_kept(material), visit)

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        return np.where(_in_slab(material), 1.0, np.nan)

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        labels = _in_slab(material).astype(np.int64)
        for label, part in PARTS.items():
            labels[(part.level(material) < 1.0) & (labels > 0)] = label
        return labels


def _in_slab(material: Points) -> NDArray[np.bool_]:
    """A rounded block that is wider at one end and deeper on one side."""
    with np.errstate(invalid="ignore"):
        x, y, z = (material / (THICK_MM / 2, LONG_MM / 2, DEEP_MM / 2)).T
        level = np.abs(x) ** 4 + np.abs(y) ** 6 + np.abs(z / (0.9 + 0.1 * y - 0.06 * x)) ** 4
        return np.asarray(level <= 1.0 + 1e-9)


def _kept(material: Points) -> Points:
    return np.where(_in_slab(material)[:, None], material, np.nan)


def make(*, seed: int = 0, voxel_mm: float | None = None) -> Phantom:
    """Three visits of the slab: bent, half unbent, flat."""
    random = np.random.default_rng(seed)
    motion = Flexure()
    half = np.array([THICK_MM, LONG_MM, DEEP_MM]) / 2
    beads = strewn(motion.labels_at, np.stack([-half, half]), BEADS_IN, random, depth_mm=2.0)
    texture = Texture.drawn(random)
    corners = np.stack(np.meshgrid(*(np.linspace(-h, h, 31) for h in half), indexing="ij"), -1).reshape(-1, 3)
    body = corners[_in_slab(corners)]
    visits = tuple(
        scanned(
            motion,
            visit,
            grid_around(motion.bent(body, visit), protocol.cubic(voxel_mm)),
            contrast=CONTRAST,
            texture=texture,
            beads=beads,
            random=random,
            name=f"visit{visit}",
        )
        for visit, protocol in enumerate(PROTOCOLS)
    )
    return Phantom("folded-slab", visits, Truth(motion), STORY)
