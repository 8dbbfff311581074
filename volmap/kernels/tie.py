"""Moving a point to where two, three or four labels tie."""

from __future__ import annotations

import numpy as np

from volmap.kernels.compiled import inner_kernel
from volmap.kernels.labelfield import evaluate

NEWTON_STEPS = 8
TIED = 2e-3  # difference of two indicators that counts as none: about 0.002 voxel
HALVINGS = 12
FLATTEST = 0.05  # gradient per voxel below which Newton's step means nothing


@inner_kernel
def _gap_along(field, place, at, ties, normals, row, scratch):  # type: ignore[no-untyped-def]
    """Value of the first tied label minus that of the second, `at` mm along the normal of a row."""
    count = evaluate(
        field,
        place[0] + at * normals[row, 0],
        place[1] + at * normals[row, 1],
        place[2] + at * normals[row, 2],
        scratch,
    )
    gap = 0.0
    for slot in range(count):
        if scratch.names[slot] == ties[row, 0]:
            gap += scratch.values[slot, 0]
        elif scratch.names[slot] == ties[row, 1]:
            gap -= scratch.values[slot, 0]
    return gap


@inner_kernel
def _fill_gaps(scratch, count, ties, row, n_gaps):  # type: ignore[no-untyped-def]
    """Differences of the tied labels from the first of them, with gradients.

    Returns
    -------
    worst : float
        Largest absolute difference; -1 when one of the labels is not near.
    """
    gaps, slopes = scratch.gaps, scratch.slopes
    first = -1
    for slot in range(count):
        if scratch.names[slot] == ties[row, 0]:
            first = slot
    worst = 0.0
    for g in range(n_gaps):
        other = -1
        for slot in range(count):
            if scratch.names[slot] == ties[row, g + 1]:
                other = slot
        if first < 0 or other < 0:
            return -1.0
        gaps[g] = scratch.values[first, 0] - scratch.values[other, 0]
        for d in range(3):
            slopes[g, d] = scratch.values[first, d + 1] - scratch.values[other, d + 1]
        worst = max(worst, abs(gaps[g]))
    return worst


@inner_kernel
def _solve_gaps(scratch, n_gaps, ridge):  # type: ignore[no-untyped-def]
    """Replace the gaps g by z with ``(J J' + ridge) z = g``: elimination without pivots, at most 3 x 3."""
    gaps, slopes, matrix = scratch.gaps, scratch.slopes, scratch.normal_matrix
    for i in range(n_gaps):
        for j in range(n_gaps):
            matrix[i, j] = (
                slopes[i, 0] * slopes[j, 0] + slopes[i, 1] * slopes[j, 1] + slopes[i, 2] * slopes[j, 2]
            )
        matrix[i, i] += ridge
    for i in range(n_gaps):
        for j in range(i + 1, n_gaps):
            factor = matrix[j, i] / matrix[i, i]
            gaps[j] -= factor * gaps[i]
            for k in range(i, n_gaps):
                matrix[j, k] -= factor * matrix[i, k]
    for i in range(n_gaps - 1, -1, -1):
        for k in range(i + 1, n_gaps):
            gaps[i] -= matrix[i, k] * gaps[k]
        gaps[i] /= matrix[i, i]


@inner_kernel
def _newton_step(scratch, n_gaps, voxel_mm):  # type: ignore[no-untyped-def]
    """The shortest step that closes the gaps to first order, at most 0.6 voxel; False in a flat field."""
    slopes, step = scratch.slopes, scratch.step
    if n_gaps == 1:
        squared = slopes[0, 0] ** 2 + slopes[0, 1] ** 2 + slopes[0, 2] ** 2
        if squared < (FLATTEST / voxel_mm) ** 2:
            return False
        scratch.gaps[0] /= squared
    else:
        _solve_gaps(scratch, n_gaps, 1e-4 / voxel_mm**2)
    for d in range(3):
        step[d] = 0.0
        for g in range(n_gaps):
            step[d] -= slopes[g, d] * scratch.gaps[g]
    length = np.sqrt(step[0] ** 2 + step[1] ** 2 + step[2] ** 2)
    if length > 0.6 * voxel_mm:
        for d in range(3):
            step[d] *= 0.6 * voxel_mm / length
    return True


@inner_kernel
def _search_normal(field, place, ties, normals, row, reach_mm, scratch):  # type: ignore[no-untyped-def]
    """Move `place` along the normal to the nearest change of sign: strides of half a voxel, then halving."""
    stride = 0.5 * min(field.spacing[0], field.spacing[1], field.spacing[2])
    here = _gap_along(field, place, 0.0, ties, normals, row, scratch)
    low, high, n_strides, halvings = 0.0, 0.0, int(reach_mm / stride) + 1, 0
    for trial in range(2 * n_strides + HALVINGS):
        if high == 0.0 and trial >= 2 * n_strides:
            return False
        if halvings == HALVINGS:
            break
        side = 1.0 if trial % 2 else -1.0
        at = side * stride * (trial // 2 + 1) if high == 0.0 else 0.5 * (low + high)
        crossed = _gap_along(field, place, at, ties, normals, row, scratch) * here < 0.0
        if high != 0.0:
            halvings += 1
        if high == 0.0 and crossed:
            low = at - side * stride
        if crossed:
            high = at
        elif high != 0.0:
            low = at
    for d in range(3):
        place[d] += high * normals[row, d]
    return True


@inner_kernel
def project(field, place, ties, normals, row, reach_mm, scratch):  # type: ignore[no-untyped-def]
    """Move a place to where the labels of a row of `ties` have equal values.

    Newton's method with the shortest step; between two labels, where Newton fails, a search along the normal.

    Parameters
    ----------
    field : LabelField
    place : (3,) float64, mm
        Changed in place when True is returned.
    ties : (n, w) int64
        Labels that should tie, filled up with -1; the first four count.
    normals : (n, 3) float64
        Unit normals; zero where there is none.
    reach_mm : float

    Returns
    -------
    bool
    """
    n_gaps = np.int64(-1)
    for q in range(min(4, ties.shape[1])):
        if ties[row, q] >= 0:
            n_gaps += 1
    if n_gaps < 1:
        return False
    voxel_mm = min(field.spacing[0], field.spacing[1], field.spacing[2])
    x, y, z = place[0], place[1], place[2]
    for _ in range(NEWTON_STEPS):
        count = evaluate(field, place[0], place[1], place[2], scratch)
        worst = _fill_gaps(scratch, count, ties, row, n_gaps)
        if 0.0 <= worst < TIED:
            return True
        if worst < 0.0 or not _newton_step(scratch, n_gaps, voxel_mm):
            break
        for d in range(3):
            place[d] += scratch.step[d]
        if (place[0] - x) ** 2 + (place[1] - y) ** 2 + (place[2] - z) ** 2 > reach_mm**2:
            break
    place[0], place[1], place[2] = x, y, z
    has_normal = normals[row, 0] != 0.0 or normals[row, 1] != 0.0 or normals[row, 2] != 0.0
    if n_gaps > 1 or not has_normal:
        return False
    return _search_normal(field, place, ties, normals, row, reach_mm, scratch)
