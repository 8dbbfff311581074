"""Smoothed label indicators: the label of any point in space, with sub-voxel boundaries.

For each label k the indicator of its voxels is smoothed by the cubic B-spline of width w,

    phi_k(x) = sum_i B3((x - i) / w) / w [labels_i = k] + offset_k,

evaluated where it is asked for; the label of a point is the one with the largest value.  B3 is the centred
cubic B-spline (Schoenberg 1946; Unser 1999, eq. 6): twice differentiable, zero beyond two widths.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

MOST_LABELS = 24  # labels that can meet within two widths of a point; further ones are merged into the last
MOST_WEIGHTS = 16  # voxels along one axis within two widths
BISECTIONS = 24


class LabelField(NamedTuple):
    """What the smoothed indicators are made of; voxel (i, j, k) sits at ``(i, j, k) * spacing`` mm.

    Attributes
    ----------
    labels : (I, J, K) uint16
        0 outside the body; everything beyond the array counts as 0.
    spacing : (3,) float64, mm
    width : (3,) float64, voxels
        At most 3.5.
    offsets : (n_labels,) float64
        Added to each label's value; a positive one makes the label swell.
    """

    labels: NDArray[np.uint16]
    spacing: Floats
    width: Floats
    offsets: Floats


class Scratch(NamedTuple):
    """Working memory of the kernels that evaluate a field, so that none is allocated in a loop."""

    names: Ints  # (MOST_LABELS,) labels met
    values: Floats  # (MOST_LABELS, 4) value and gradient of each
    weights: Floats  # (3, 2, MOST_WEIGHTS) spline and slope along each axis
    gaps: Floats  # (3,) differences between tied labels
    slopes: Floats  # (3, 3) their gradients
    normal_matrix: Floats  # (3, 3)
    step: Floats  # (3,)


def new_scratch() -> Scratch:
    """Fresh working memory."""
    return Scratch(
        np.zeros(MOST_LABELS, np.int64),
        np.zeros((MOST_LABELS, 4)),
        np.zeros((3, 2, MOST_WEIGHTS)),
        np.zeros(3),
        np.zeros((3, 3)),
        np.zeros((3, 3)),
        np.zeros(3),
    )


@inner_kernel
def _spline(t):  # type: ignore[no-untyped-def]
    """B3(t)."""
    t = abs(t)
    if t < 1.0:
        return 2.0 / 3.0 - t * t * (1.0 - 0.5 * t)
    if t < 2.0:
        return (2.0 - t) ** 3 / 6.0
    return 0.0


@inner_kernel
def _spline_slope(t):  # type: ignore[no-untyped-def]
    """Derivative of B3 at t."""
    sign = 1.0 if t > 0.0 else -1.0
    t = abs(t)
    if t < 1.0:
        return sign * t * (1.5 * t - 2.0)
    if t < 2.0:
        return -0.5 * sign * (2.0 - t) ** 2
    return 0.0


@inner_kernel
def _weigh_axis(field, axis, place_mm, weights):  # type: ignore[no-untyped-def]
    """Fill the weights along one axis; returns the first voxel that counts and how many do."""
    width, spacing = field.width[axis], field.spacing[axis]
    centre = place_mm / spacing
    first = int(np.ceil(centre - 2.0 * width))
    count = int(np.floor(centre + 2.0 * width)) - first + 1
    for i in range(count):
        t = (centre - first - i) / width
        weights[axis, 0, i] = _spline(t) / width
        weights[axis, 1, i] = _spline_slope(t) / (width * width * spacing)
    return first, count


@inner_kernel
def _slot_of(names, count, label):  # type: ignore[no-untyped-def]
    """Where a label's sums are kept; `count` when it has not been met."""
    for slot in range(count):
        if names[slot] == label:
            return slot
    return min(count, names.shape[0] - 1)


@inner_kernel
def _add_run(scratch, count, label, a, b, run, slope):  # type: ignore[no-untyped-def]
    """Add a run of voxels of one label along the last axis; returns the number of labels met."""
    names, values, weights = scratch.names, scratch.values, scratch.weights
    slot = _slot_of(names, count, label)
    if slot == count:
        names[slot] = label
        values[slot, 0] = values[slot, 1] = values[slot, 2] = values[slot, 3] = 0.0
        count += 1
    wa, wb = weights[0, 0, a], weights[1, 0, b]
    values[slot, 0] += wa * wb * run
    values[slot, 1] += weights[0, 1, a] * wb * run
    values[slot, 2] += wa * weights[1, 1, b] * run
    values[slot, 3] += wa * wb * slope
    return count


@inner_kernel
def evaluate(field, x, y, z, scratch):  # type: ignore[no-untyped-def]
    """Values and gradients (1/mm) of all labels near a point.

    Returns
    -------
    count : int
        ``scratch.names[:count]`` and ``scratch.values[:count]`` are filled.
    """
    labels, weights = field.labels, scratch.weights
    first_i, n_i = _weigh_axis(field, np.int64(0), x, weights)
    first_j, n_j = _weigh_axis(field, np.int64(1), y, weights)
    first_k, n_k = _weigh_axis(field, np.int64(2), z, weights)
    count = np.int64(0)
    for a in range(n_i):
        i = first_i + a
        for b in range(n_j):
            j = first_j + b
            outside = i < 0 or j < 0 or i >= labels.shape[0] or j >= labels.shape[1]
            current, run, slope = np.int64(-1), 0.0, 0.0
            for c in range(n_k):
                k = first_k + c
                label = np.int64(0)
                if not (outside or k < 0 or k >= labels.shape[2]):
                    label = np.int64(labels[i, j, k])
                if label != current and current >= 0:
                    count = _add_run(scratch, count, current, a, b, run, slope)
                    run, slope = 0.0, 0.0
                current = label
                run += weights[2, 0, c]
                slope += weights[2, 1, c]
            count = _add_run(scratch, count, current, a, b, run, slope)
    for slot in range(count):
        scratch.values[slot, 0] += field.offsets[scratch.names[slot]]
    return count


@kernel
def owners(field, points, scratch):  # type: ignore[no-untyped-def]
    """(n,) int64 label with the largest value at each point (mm, of the field); the smaller one of equals."""
    found = np.empty(points.shape[0], np.int64)
    for p in range(points.shape[0]):
        count = evaluate(field, points[p, 0], points[p, 1], points[p, 2], scratch)
        best = 0
        for slot in range(1, count):
            gap = scratch.values[slot, 0] - scratch.values[best, 0]
            if gap > 0.0 or (gap == 0.0 and scratch.names[slot] < scratch.names[best]):
                best = slot
        found[p] = scratch.names[best]
    return found


@kernel
def voxel_changes(field, points, owner, edges, n_samples):  # type: ignore[no-untyped-def]
    """(m,) int64, how often the label changes along each edge.

    From the label at its first point (`owner`), by the voxels at places spread evenly inside it, to the label
    at its second point.
    """
    labels, spacing = field.labels, field.spacing
    changes = np.zeros(edges.shape[0], np.int64)
    for e in range(edges.shape[0]):
        a, b = edges[e, 0], edges[e, 1]
        before = owner[a]
        for q in range(n_samples):
            share = (q + 1.0) / (n_samples + 1.0)
            i = int(np.rint((points[a, 0] + share * (points[b, 0] - points[a, 0])) / spacing[0]))
            j = int(np.rint((points[a, 1] + share * (points[b, 1] - points[a, 1])) / spacing[1]))
            k = int(np.rint((points[a, 2] + share * (points[b, 2] - points[a, 2])) / spacing[2]))
            here = np.int64(0)
            if 0 <= i < labels.shape[0] and 0 <= j < labels.shape[1] and 0 <= k < labels.shape[2]:
                here = np.int64(labels[i, j, k])
            if here != before:
                changes[e] += 1
            before = here
        if owner[b] != before:
            changes[e] += 1
    return changes


@inner_kernel
def _holds(sets, row, label):  # type: ignore[no-untyped-def]
    """Whether a row of a table of label sets (filled with -1) holds a label."""
    found = False
    for q in range(sets.shape[1]):
        found = found or sets[row, q] == label
    return found


@inner_kernel
def _lead(field, points, sets, start, end, t, scratch):  # type: ignore[no-untyped-def]
    """How far the labels of `start` lead over all others at ``start + t (end - start)``.

    Returns
    -------
    lead : float
    inside, outside : int
        The strongest label of the set and the strongest other one; -1 when there is none.
    """
    count = evaluate(
        field,
        points[start, 0] + t * (points[end, 0] - points[start, 0]),
        points[start, 1] + t * (points[end, 1] - points[start, 1]),
        points[start, 2] + t * (points[end, 2] - points[start, 2]),
        scratch,
    )
    best, rival, inside, outside = 0.0, 0.0, -1, -1
    for slot in range(count):
        value, label = scratch.values[slot, 0], scratch.names[slot]
        if _holds(sets, start, label):
            if inside < 0 or value > best:
                best, inside = value, label
        elif outside < 0 or value > rival:
            rival, outside = value, label
    return best - rival, inside, outside


@kernel
def cut_edges(field, points, sets, edges, scratch):  # type: ignore[no-untyped-def]
    """Where along each edge the label leaves the set of labels of its first point.

    Parameters
    ----------
    points : (n, 3) float64, mm, of the field
    sets : (n, w) int64
        Labels each point stands between, filled up with -1.
    edges : (m, 2) int64

    Returns
    -------
    where : (m,) float64
        0 at the first point, 1 at the second; 1 also when the label does not change.
    labels : (m, 2) int64
        The label left and the label entered (-1 when it does not change).
    """
    where = np.empty(edges.shape[0])
    labels = np.empty((edges.shape[0], 2), np.int64)
    for e in range(edges.shape[0]):
        start, end = edges[e, 0], edges[e, 1]
        low, high, middle = 0.0, 1.0, 0.0
        lead_low, inside, outside = _lead(field, points, sets, start, end, 0.0, scratch)
        lead_high, _, entered = _lead(field, points, sets, start, end, 1.0, scratch)
        if lead_low <= 1e-9:
            high = 0.0
        elif lead_high >= 0.0:
            low, entered = 1.0, -1
        else:
            outside = entered
        for turn in range(BISECTIONS):
            if high - low < 1e-4:
                break
            flat = lead_low > 0.999 or lead_high < -0.999
            share = 0.5 if flat or turn % 3 == 2 else lead_low / (lead_low - lead_high)
            middle = low + (high - low) * share
            lead, best, rival = _lead(field, points, sets, start, end, middle, scratch)
            if lead > 0.0:
                low, lead_low, inside = middle, lead, best
            else:
                high, lead_high, outside = middle, lead, rival
            if abs(lead) < 1e-6:
                break
        if high == 0.0:
            where[e] = 0.0
        elif low == 1.0:
            where[e], outside = 1.0, -1
        else:
            where[e] = low + (high - low) * lead_low / (lead_low - lead_high)
        labels[e, 0], labels[e, 1] = inside, outside
    return where, labels
