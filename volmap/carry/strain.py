"""What a map does to small pieces of tissue: stretches, their directions, and the turn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types import VolumeMap

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Strain:
    """F = R U of each tet (polar decomposition), U by its principal stretches.

    Parameters
    ----------
    stretches : (m, 3) float64
        Descending.
    before, after : (m, 3, 3) float64
        ``before[t, a]`` is the unit direction in SOURCE that stretch a acts along, ``after[t, a]`` where it
        points in TARGET: ``F before[a] = stretches[a] after[a]``.  A direction has no sign: its largest
        component in SOURCE is made positive.  Where two stretches are equal, any two directions of their
        plane serve.
    turns : (m, 3, 3) float64
        R, proper where J > 0.
    """

    stretches: Floats
    before: Floats
    after: Floats
    turns: Floats


def strain_of(volume_map: VolumeMap) -> Strain:
    """Stretches, directions and turn of each tet of a map."""
    left, stretches, right = np.linalg.svd(volume_map.gradients)
    turns = left @ right
    largest = np.abs(right).argmax(axis=2)[..., None]
    signs = np.where(np.take_along_axis(right, largest, axis=2) < 0, -1.0, 1.0)
    return Strain(stretches, right * signs, left.swapaxes(1, 2) * signs, turns)
