"""A simulated motion, and its file."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

DATA = Path(__file__).parent / "data" / "gel_column.npz"


@dataclass(frozen=True, eq=False)
class Simulation:
    """A simulated motion on linear tets.

    Parameters
    ----------
    points : (n, 3) float64, mm
        Nodes at rest.
    tets : (m, 4) int64
    displacements : (visits, n, 3) float64, mm
        Visit 0 is at rest.
    """

    points: NDArray[np.float64]
    tets: NDArray[np.int64]
    displacements: NDArray[np.float64]


def store(simulation: Simulation, file: Path) -> None:
    """Write a simulation as a small .npz (float32, mm; visit 0 left out)."""
    np.savez_compressed(
        file,
        points_mm=simulation.points.astype(np.float32),
        tets=simulation.tets.astype(np.uint16),
        displacements_mm=simulation.displacements[1:].astype(np.float32),
    )


def stored(file: Path = DATA) -> Simulation:
    """Read a simulation back."""
    with np.load(file) as data:
        points = data["points_mm"].astype(np.float64)
        moved = data["displacements_mm"].astype(np.float64)
        rest = np.zeros((1, *points.shape))
        return Simulation(points, data["tets"].astype(np.int64), np.concatenate([rest, moved]))
