"""A rounded body inside another."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation


@dataclass(frozen=True)
class Inclusion:
    """A rounded body ``|q1|^p + |q2|^p + |q3|^p < 1``, q the rotated, scaled position.

    Parameters
    ----------
    centre_mm, semi_axes_mm, turn_deg : tuple of 3 float
        Centre, half widths, and x-y-z Euler angles of the axes, at rest.
    power : float
        2 is an ellipsoid; larger is boxier.
    """

    centre_mm: tuple[float, float, float]
    semi_axes_mm: tuple[float, float, float]
    turn_deg: tuple[float, float, float]
    power: float

    def level(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n,) values below 1 inside, for (n, 3) points at rest, mm."""
        axes = Rotation.from_euler("xyz", self.turn_deg, degrees=True).as_matrix()
        local = (points - np.array(self.centre_mm)) @ axes / np.array(self.semi_axes_mm)
        return np.asarray((np.abs(local) ** self.power).sum(axis=-1))
