"""Beads: material points strewn through a body, known at every visit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

# Directions in which a bead must have its own label around it: the 26 neighbours of a cube's centre.
_AROUND = np.array([p for p in np.ndindex(3, 3, 3) if p != (1, 1, 1)], float) - 1
_AROUND /= np.linalg.norm(_AROUND, axis=1, keepdims=True)


@dataclass(frozen=True, eq=False)
class Beads:
    """Named material points.

    Parameters
    ----------
    names : tuple of str
    material : (n, 3) float64, mm
    """

    names: tuple[str, ...]
    material: NDArray[np.float64]


def strewn(
    labels_at: Callable[[NDArray[np.float64]], NDArray[np.int64]],
    box_mm: NDArray[np.float64],
    counts: dict[int, int],
    random: np.random.Generator,
    *,
    depth_mm: float = 2.5,
    apart_mm: float = 7.0,
) -> Beads:
    """Beads at random places, a count in each label, in from its surface and apart from each other.

    Parameters
    ----------
    labels_at : callable
        (n, 3) material points, mm, to (n,) labels.
    box_mm : (2, 3) float64
        Low and high corner of a box around the body.
    counts : dict of int to int
        Beads a label.
    random : numpy Generator
    depth_mm : float
        Each bead has its label around it at this distance in 26 directions.
    apart_mm : float
        Least distance of two beads at rest.

    Raises
    ------
    ArithmeticError
        The body has no room for them.
    """
    chosen: list[NDArray[np.float64]] = []
    for label in sorted(counts, reverse=True):
        wanted = len(chosen) + counts[label]
        for _ in range(200):
            drawn = random.uniform(box_mm[0], box_mm[1], (400, 3))
            for point in drawn[_deep(labels_at, drawn, label, depth_mm)]:
                far = all(np.linalg.norm(point - other) >= apart_mm for other in chosen)
                if far and len(chosen) < wanted:
                    chosen.append(point)
            if len(chosen) == wanted:
                break
        else:
            raise ArithmeticError(f"no room for {counts[label]} beads in label {label}")
    return Beads(tuple(f"bead{k + 1:02d}" for k in range(len(chosen))), np.array(chosen))


def _deep(
    labels_at: Callable[[NDArray[np.float64]], NDArray[np.int64]],
    points: NDArray[np.float64],
    label: int,
    depth_mm: float,
) -> NDArray[np.bool_]:
    here = labels_at(points) == label
    around = (points[here][:, None] + depth_mm * _AROUND).reshape(-1, 3)
    here[here] = (labels_at(around) == label).reshape(-1, len(_AROUND)).all(axis=1)
    return np.asarray(here)
