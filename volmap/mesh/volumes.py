"""Small offsets of the field, so that every label keeps the volume of its voxels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.labelfield import LabelField, Scratch
from volmap.kernels.strata import Strata
from volmap.kernels.tets import signed_volumes
from volmap.mesh.improve import on_ties
from volmap.mesh.labelled import Complex

Floats = NDArray[np.float64]

CLOSE = 0.001  # relative volume error that ends the rounds
LARGEST_DIFFERENCE = 0.6  # between the offsets of labels that touch
MOST_RELAXATIONS = 8


def label_volumes(complex_: Complex, n_labels: int) -> Floats:
    """(n_labels,) volume of each label, mm3."""
    volumes = signed_volumes(complex_.points, complex_.tets)
    return np.asarray(np.bincount(complex_.labels, volumes, n_labels), np.float64)


def shared_areas(points: Floats, strata: Strata, n_labels: int) -> Floats:
    """(n_labels, n_labels) symmetric: area of the interface between two labels, mm2."""
    sides, p = strata.sides, points[strata.triangles]
    area = 0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1)
    shared = np.bincount(sides[:, 0] * n_labels + sides[:, 1], area, n_labels**2).reshape(n_labels, n_labels)
    return np.asarray(shared + shared.T)


def flat_slope(field: LabelField) -> float:
    """Slope of the difference of two labels at a flat interface between them, 1/mm: 2 B3(0) / width."""
    return float(2.0 * (2.0 / 3.0) / (field.width[0] * np.cbrt(np.prod(field.spacing))))


def offset_steps(shared: Floats, wanted: Floats, slope: float, active: NDArray[np.bool_]) -> Floats:
    """Changes of the offsets that change the volumes of the active labels by `wanted` to first order.

    A difference d of two offsets moves their interface by d / slope, so volumes follow a graph Laplacian
    weighted with area / slope; labels that are not active keep their offset.
    """
    weights = shared / slope
    laplacian = np.diag(weights.sum(axis=1)) - weights
    system = laplacian[np.ix_(active, active)]
    system = system + 1e-9 * laplacian.max() * np.eye(len(system))
    steps = np.zeros(len(wanted))
    steps[active] = np.linalg.solve(system, wanted[active])
    return steps


def _limited(offsets: Floats, steps: Floats, shared: Floats) -> Floats | None:
    """Offsets plus as much of the steps as keeps touching labels close; None when hardly any does."""
    touching = shared > 0
    for turn in range(MOST_RELAXATIONS):
        trial = offsets + 0.6**turn * steps
        if np.abs(trial[:, None] - trial[None, :])[touching].max() <= LARGEST_DIFFERENCE:
            return np.asarray(trial)
    return None


def fitted(
    field: LabelField,
    complex_: Complex,
    strata: Strata,
    *,
    wanted_mm3: Floats,
    rounds: int,
    scratch: Scratch,
) -> tuple[LabelField, Complex]:
    """The field with offsets, and the complex on its ties, whose labels have the wanted volumes.

    Parameters
    ----------
    wanted_mm3 : (n_labels,) float64
        Entry 0 (outside) is not used.
    """
    n, slope = len(wanted_mm3), flat_slope(field)
    for _ in range(rounds):
        volumes = label_volumes(complex_, n)
        errors = wanted_mm3 - volumes
        active = (volumes > 0) & (wanted_mm3 > 0) & (np.arange(n) > 0)
        if not active.any() or (np.abs(errors[active]) / wanted_mm3[active]).max() < CLOSE:
            break
        shared = shared_areas(complex_.points, strata, n)
        offsets = _limited(field.offsets, offset_steps(shared, errors, slope, active), shared)
        if offsets is None:
            break
        expected = shared / slope
        moved = offsets - field.offsets
        predicted = (expected.sum(axis=1) * moved - expected @ moved)[active]
        field = field._replace(offsets=offsets)
        complex_ = on_ties(field, complex_, strata, scratch)
        gained = (label_volumes(complex_, n) - volumes)[active]
        gain = float(gained @ predicted) / max(float(predicted @ predicted), 1e-300)
        slope = slope / float(np.clip(gain, 0.5, 2.0))
    return field, complex_
