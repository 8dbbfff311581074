"""From a coarse mesh of a body to a finer one: where a coarse solve leaves off, a finer one starts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest
from volmap.kernels.observations import towards
from volmap.mapping.holding import holding_tets
from volmap.mapping.objective import Objective
from volmap.mapping.patches import areas
from volmap.types import Surface, TetMesh

Floats = NDArray[np.float64]

PULL = 10.0  # of all points to a wanted start, in units of the boundary weight
MOST_PULLS = 8  # Newton steps towards a wanted start that is not valid
GAIN = 0.1  # relative decrease a step below which a start counts as near enough
FORCING = 0.1
OF_THE_CENTRE = 0.6  # mean square height of a cap over an equilateral facet, of that at its centre (exact)


@dataclass(frozen=True, eq=False)
class Bodies:
    """One mesh of the source body, and the target's surfaces to map it onto.

    Parameters
    ----------
    mesh : TetMesh
    target : Surface
    """

    mesh: TetMesh
    target: Surface


def carried(coarse: TetMesh, images: Floats, points: Floats) -> Floats:
    """(n, 3) images of points (n, 3) mm by a coarse map, continued linearly beyond its faces."""
    tet, barycentric, _ = holding_tets(coarse, points)
    return np.asarray(np.einsum("kc,kcd->kd", barycentric, images[np.array(coarse.tets)[tet]]))


def valid_start(objective: Objective, safe: Floats, wanted: Floats, *, unit: float) -> Floats:
    """`wanted` when it is valid, else valid images as near to it as Newton steps from `safe` lead.

    Parameters
    ----------
    objective : Objective
    safe : (n, 3) float64, mm
        Valid images: every tet positive, boundary embedded.
    wanted : (n, 3) float64, mm
        Images interpolated from a coarse map, which may invert some tets.
    unit : float
        Unit of the boundary weight, 1/mm2.
    """
    if objective.is_valid(wanted):
        return wanted
    share = np.bincount(objective.tets.ravel(), np.repeat(objective.weights / 4.0, 4), len(wanted))
    pulls = towards(wanted, np.asarray(PULL * unit * share, np.float64))
    if objective.contact is not None:
        objective.contact.weight = unit
    images = safe
    for _ in range(MOST_PULLS):
        at = objective.differentiate(images, pulls)
        step = objective.descend(images, pulls, at=at, forcing=FORCING)
        images = step.images
        if step.value.total > (1.0 - GAIN) * at.total:
            break
    return images


def facet_noise_mm(coarse: Surface, fine: Surface) -> float:
    """How far a coarse surface's facets lie from a finer one of the same body (root mean square, mm)."""
    points, triangles = np.array(fine.points), np.array(fine.triangles)
    centres = coarse.points[coarse.triangles].mean(axis=1)
    _, _, squared = closest.closest(closest.build_tree(points, triangles), points, triangles, centres)
    mean = np.average(squared, weights=areas(coarse.points, coarse.triangles))
    return float(np.sqrt(OF_THE_CENTRE * mean))
