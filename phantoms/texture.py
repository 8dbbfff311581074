"""A random texture that belongs to the material and moves with it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Texture:
    """A sum of plane waves: mean 0, standard deviation about 1.

    Parameters
    ----------
    waves : (n, 3) float64
        Wave vectors, radian/mm.
    phases : (n,) float64
        Radian.
    """

    waves: NDArray[np.float64]
    phases: NDArray[np.float64]

    @classmethod
    def drawn(
        cls, random: np.random.Generator, *, lengths_mm: tuple[float, float] = (8.0, 25.0), n_waves: int = 32
    ) -> Texture:
        """Waves in all directions with lengths spread evenly over a range."""
        direction = random.standard_normal((n_waves, 3))
        direction /= np.linalg.norm(direction, axis=1, keepdims=True)
        length = random.uniform(*lengths_mm, n_waves)
        return cls(direction * (2 * np.pi / length)[:, None], random.uniform(0, 2 * np.pi, n_waves))

    def at(self, material: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n,) value at (n, 3) material points, mm."""
        values = np.zeros(len(material))
        for wave, phase in zip(self.waves, self.phases, strict=True):
            values += np.cos(material @ wave + phase)
        return np.asarray(values * np.sqrt(2 / len(self.waves)))
