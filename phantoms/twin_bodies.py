"""`twin-bodies`: two different bodies of one family, with labelled structures inside.

No material point of one body is a material point of the other, so there is no true map between them. What
the family does define is kept and nothing else: the labelled structures, and sites named within each
structure.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from .beads import Beads
from .inclusion import Inclusion
from .phantom import Phantom, Points
from .scanner import Contrast, Protocol, grid_around, scanned
from .texture import Texture

NAMES = {1: "bulk", 2: "node", 3: "stalk", 4: "lens"}
CONTRAST = Contrast(NAMES, {1: 100.0, 2: 180.0, 3: 60.0, 4: 150.0})
# Sites lie at this share of a structure's half width, so that a voxel's rounding keeps them inside.
SITE_DEPTH = 0.75
STORY = (
    "Two gel bodies cast from one family of moulds: an egg with two lobes and a dent, holding a node, a "
    "stalk and a lens. The second is a third larger in volume, is turned and shifted, has other "
    "proportions, and its structures sit elsewhere. There is no true map between two different bodies, "
    "so none is given: known are the labels, and 21 sites (the middle of each structure, and the points "
    "three quarters of the way to its surface along its own axes), which correspond because the family "
    "names them so. Between the structures nothing is known, and any number given there would be an "
    "invention."
)


@dataclass(frozen=True)
class Body:
    """One member of the family: an ellipsoid with bumps and dents, and structures inside.

    It is a motion that stays where it is, so the scanner can record it.

    Parameters
    ----------
    semi_axes_mm : tuple of 3 float
    bumps : tuple of (direction, height, sharpness)
        Each multiplies the radius by ``1 + height exp(sharpness (cos angle - 1))``, summed.
    structures : dict of int to Inclusion
        In the body's own frame.
    turn_deg, shift_mm : tuple of 3 float
        x-y-z Euler angles and place of the body in the scanner.
    """

    semi_axes_mm: tuple[float, float, float]
    bumps: tuple[tuple[tuple[float, float, float], float, float], ...]
    structures: dict[int, Inclusion]
    turn_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    shift_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def to_material(self, points: Points, visit: int) -> Points:
        return np.asarray((points - np.array(self.shift_mm)) @ self._turn())

    def from_material(self, material: Points, visit: int) -> Points:
        return np.asarray(material @ self._turn().T + np.array(self.shift_mm))

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        return np.where(self._inside(material), 1.0, np.nan)

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        labels = self._inside(material).astype(np.int64)
        for label, structure in self.structures.items():
            labels[(structure.level(material) < 1.0) & (labels > 0)] = label
        return labels

    def sites(self) -> Beads:
        """The middle of each structure and six sites along its axes, in the body's own frame."""
        names, points = [], []
        for label, structure in self.structures.items():
            axes = Rotation.from_euler("xyz", structure.turn_deg, degrees=True).as_matrix()
            steps = {"middle": np.zeros(3)}
            for axis, letter in enumerate("abc"):
                for sign, word in ((1, "plus"), (-1, "minus")):
                    steps[f"{letter}-{word}"] = (
                        SITE_DEPTH * sign * structure.semi_axes_mm[axis] * axes[:, axis]
                    )
            for site, step in steps.items():
                names.append(f"{NAMES[label]}-{site}")
                points.append(np.array(structure.centre_mm) + step)
        return Beads(tuple(names), np.array(points))

    def outline(self) -> Points:
        """(2000, 3) points spread over the surface, in the body's own frame, mm."""
        k = np.arange(2000) + 0.5
        polar, turn = np.arccos(1 - k / 1000), np.pi * (1 + np.sqrt(5)) * k
        unit = np.stack([np.sin(polar) * np.cos(turn), np.sin(polar) * np.sin(turn), np.cos(polar)], axis=1)
        return np.asarray(unit * np.array(self.semi_axes_mm) * self._swelling(unit)[:, None])

    def _inside(self, material: Points) -> NDArray[np.bool_]:
        scaled = material / np.array(self.semi_axes_mm)
        radius = np.linalg.norm(scaled, axis=1)
        unit = scaled / np.maximum(radius, 1e-12)[:, None]
        return np.asarray(radius <= self._swelling(unit))

    def _swelling(self, unit: Points) -> NDArray[np.float64]:
        swelling = np.ones(len(unit))
        for direction, height, sharpness in self.bumps:
            towards = np.array(direction) / np.linalg.norm(direction)
            swelling += height * np.exp(sharpness * (unit @ towards - 1))
        return swelling

    def _turn(self) -> NDArray[np.float64]:
        return np.asarray(Rotation.from_euler("xyz", self.turn_deg, degrees=True).as_matrix())


BODIES = (
    Body(
        (24.0, 18.0, 20.0),
        (((1, 0.2, 0.3), 0.22, 5.0), ((-0.5, 0.9, -0.2), 0.18, 6.0), ((-0.2, -1, 0.4), -0.14, 7.0)),
        {
            2: Inclusion((12.0, 2.0, 2.0), (7.0, 5.5, 6.0), (10.0, 20.0, 0.0), 2.0),
            3: Inclusion((-9.0, 4.5, -3.5), (4.5, 4.5, 9.0), (15.0, -25.0, 10.0), 2.3),
            4: Inclusion((-2.5, -5.2, 5.5), (6.5, 4.0, 5.0), (-10.0, 15.0, 20.0), 2.0),
        },
    ),
    Body(
        (28.0, 19.0, 21.5),
        (((1, 0.35, 0.1), 0.26, 4.5), ((-0.6, 0.8, 0.1), 0.16, 6.5), ((-0.1, -1, 0.5), -0.18, 6.0)),
        {
            2: Inclusion((15.0, 3.5, 0.5), (8.0, 6.0, 6.0), (18.0, 12.0, 8.0), 2.0),
            3: Inclusion((-11.0, 5.0, -3.0), (5.0, 5.5, 9.0), (25.0, -18.0, 18.0), 2.3),
            4: Inclusion((-1.0, -5.0, 6.5), (7.0, 4.5, 5.0), (-4.0, 22.0, 12.0), 2.0),
        },
        (8.0, -10.0, 15.0),
        (12.0, -9.0, 6.0),
    ),
)
PROTOCOLS = (
    Protocol((1.0, 1.0, 1.5), "RAS"),
    Protocol((1.1, 1.1, 1.4), "LIP", (5.0, 8.0, -6.0)),
)


def make(*, seed: int = 0, voxel_mm: float | None = None) -> Phantom:
    """The two bodies, as visits 0 and 1; each has a texture of its own."""
    random = np.random.default_rng(seed)
    visits = tuple(
        scanned(
            body,
            0,
            grid_around(body.from_material(body.outline(), 0), protocol.cubic(voxel_mm)),
            contrast=CONTRAST,
            texture=Texture.drawn(random),
            beads=body.sites(),
            random=random,
            name=f"visit{k}",
        )
        for k, (body, protocol) in enumerate(zip(BODIES, PROTOCOLS, strict=True))
    )
    return Phantom("twin-bodies", visits, None, STORY)
