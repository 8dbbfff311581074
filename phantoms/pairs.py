"""A pair of label volumes made to be mapped onto each other: what it is, and how it is scanned."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol as Shape

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import generate_binary_structure, label
from skimage.measure import euler_number

from volmap.types import LabelVolume, LandmarkPairs

from .phantom import Points, Truth
from .scanner import Protocol, grid_around, voxel_centres
from .warps import Warp

OUTLINE_STEPS = 48  # a side of the lattice that finds how far a body reaches


class Body(Shape):
    """Labelled material, at rest."""

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        """(n,) label at (n, 3) material points, mm; 0 outside."""

    @property
    def box_mm(self) -> NDArray[np.float64]:
        """(2, 3) corners of a box that holds the body."""


@dataclass(frozen=True, eq=False)
class Warped:
    """One body at two visits, each a warp of its state at rest.

    Parameters
    ----------
    body : Body
    visits : tuple of Warp
    """

    body: Body
    visits: tuple[Warp, ...]

    def to_material(self, points: Points, visit: int) -> Points:
        return self._kept(self.visits[visit].back(points))

    def from_material(self, material: Points, visit: int) -> Points:
        return self.visits[visit].there(self._kept(material))

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        material = self._kept(material)
        before, after = (self.visits[v].ratio(material) for v in (from_visit, to_visit))
        return np.asarray(np.where(np.isnan(material[:, 0]), np.nan, after / before))

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        return self.body.labels_at(material)

    def _kept(self, material: Points) -> Points:
        return np.where((self.body.labels_at(material) > 0)[:, None], material, np.nan)


@dataclass(frozen=True, eq=False)
class Pair:
    """Two label volumes of the same labels.

    Parameters
    ----------
    name, kind : str
    source, target : LabelVolume
    story : str
        How the second was made from the first, in a sentence.
    truth : Truth or None
        The exact motion from visit 0 (SOURCE) to visit 1 (TARGET), where the physics of an elastic body says
        so: rigid motions, even growth, exact solutions.  None where the second body was made by an arbitrary
        warp, or is another body: a warp that makes the right shape is no truth for what lies inside.
    guides : LandmarkPairs or None
    refusal : str
        What a screen must refuse the pair for ('' for a pair that can be mapped).
    """

    name: str
    kind: str
    source: LabelVolume
    target: LabelVolume
    story: str
    truth: Truth | None = None
    guides: LandmarkPairs | None = None
    refusal: str = ""

    @property
    def voxel_mm(self) -> float:
        """Mean of both scans' voxel lengths (cube root of the volume)."""
        return 0.5 * (self.source.grid.voxel_mm + self.target.grid.voxel_mm)


def outline(body: Body, warp: Warp) -> Points:
    """(n, 3) places of material points all over a body, mm: how far it reaches."""
    low, high = body.box_mm
    axes = [np.linspace(a, b, OUTLINE_STEPS) for a, b in zip(low, high, strict=True)]
    material = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    return warp.there(material[body.labels_at(material) > 0])


def recorded(body: Body, warp: Warp, protocol: Protocol, names: Mapping[int, str], name: str) -> LabelVolume:
    """A scan of a warped body: each voxel takes the label of the material at its centre."""
    grid = grid_around(outline(body, warp), protocol)
    labels = body.labels_at(warp.back(voxel_centres(grid)))
    return LabelVolume(grid, labels.reshape(grid.shape).astype(np.uint16), dict(names), f"{name}.nii.gz")


def topology_of(volume: LabelVolume) -> dict[int, tuple[int, int]]:
    """Pieces and Euler number of each label, voxels joined by faces."""
    faces = generate_binary_structure(3, 1)
    found = {}
    for value in volume.present:
        here = volume.labels == value
        euler = euler_number(here, connectivity=1)  # type: ignore[no-untyped-call]
        found[value] = int(label(here, faces)[1]), int(euler)
    return found
