"""What a phantom is: scans of one body at several visits, and the exact motion between them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from volmap.types import ImageVolume, LabelVolume, Landmarks

Points = NDArray[np.float64]


class Motion(Protocol):
    """A motion of material points, known exactly."""

    def to_material(self, points: Points, visit: int) -> Points:
        """(n, 3) material points that are at `points` at a visit; NaN outside the body."""

    def from_material(self, material: Points, visit: int) -> Points:
        """(n, 3) places of material points at a visit, mm, RAS+; NaN outside the body."""

    def ratio(self, material: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        """(n,) volume at one visit over volume at another; NaN for NaN."""

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        """(n,) label of each material point that `to_material` gave; 0 for NaN."""


@dataclass(frozen=True, eq=False)
class Truth:
    """The exact map between any two visits of one body.

    Parameters
    ----------
    motion : Motion
    """

    motion: Motion

    def carry(self, points: Points, from_visit: int, to_visit: int) -> Points:
        """Where the material at `points` is at another visit.

        Parameters
        ----------
        points : (n, 3) float64, mm, RAS+, at `from_visit`
        from_visit, to_visit : int

        Returns
        -------
        (n, 3) float64, mm, RAS+, at `to_visit`; NaN for points outside the body.
        """
        material = self.motion.to_material(np.asarray(points, np.float64), from_visit)
        return self.motion.from_material(material, to_visit)

    def volume_ratio(self, points: Points, from_visit: int, to_visit: int) -> NDArray[np.float64]:
        """(n,) volume at `to_visit` over volume at `from_visit`, at (n, 3) points of `from_visit`."""
        material = self.motion.to_material(np.asarray(points, np.float64), from_visit)
        return self.motion.ratio(material, from_visit, to_visit)

    def labels(self, points: Points, visit: int) -> NDArray[np.int64]:
        """(n,) label at (n, 3) points of a visit; 0 outside the body."""
        return self.motion.labels_at(self.motion.to_material(np.asarray(points, np.float64), visit))


@dataclass(frozen=True, eq=False)
class Visit:
    """One scan.

    Parameters
    ----------
    labels : LabelVolume
    image : ImageVolume
        On the grid of the labels.
    beads : Landmarks
        The same names in the same order at every visit; all of role 'check'.
    """

    labels: LabelVolume
    image: ImageVolume
    beads: Landmarks


@dataclass(frozen=True, eq=False)
class Phantom:
    """Scans of a gel body with known truth.

    Parameters
    ----------
    name : str
    visits : tuple of Visit
    truth : Truth or None
        None where nothing but the landmarks is known (two different bodies).
    story : str
        What was done in the laboratory and how the truth was made, in a paragraph.
    settings : mapping of str to str
        What the phantom was made with.
    """

    name: str
    visits: tuple[Visit, ...]
    truth: Truth | None
    story: str
    settings: Mapping[str, str] = field(default_factory=dict)
