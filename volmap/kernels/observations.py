"""Quadratic pulls on points of a mesh: boundary matches and guides alike.

An observation says that the point ``sum_c weight_c x_corner_c`` should lie at an anchor: fully along a
normal, and by a share of it across.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel


class Observations(NamedTuple):
    """What pulls on the points.

    Parameters
    ----------
    corners : (k, 4) int64
        Points of one tet, a face, or one point; slots of weight 0 are not looked at.
    weights : (k, 4) float64
    edges : (k, 6) int64
        Edge of each corner pair in the order of `tets.EDGES`; not looked at where a weight is 0.
    anchors, normals : (k, 3) float64
        Anchor in mm; unit normal.
    strengths : (k,) float64
        Factor of the squared residual, 1/mm2.
    across : (k,) float64
        Share of the strength that acts across the normal; 1 is a plain distance.
    """

    corners: NDArray[np.int64]
    weights: NDArray[np.float64]
    edges: NDArray[np.int64]
    anchors: NDArray[np.float64]
    normals: NDArray[np.float64]
    strengths: NDArray[np.float64]
    across: NDArray[np.float64]


def joined(parts: list[Observations]) -> Observations:
    """Several sets as one."""
    return Observations(*(np.concatenate(columns) for columns in zip(*parts, strict=True)))


def towards(anchors: NDArray[np.float64], strengths: NDArray[np.float64]) -> Observations:
    """Pulls of every point of a mesh to an anchor of its own, (n, 3) mm, in all directions alike."""
    n = len(anchors)
    corners, weights = np.zeros((n, 4), np.int64), np.zeros((n, 4))
    corners[:, 0], weights[:, 0] = np.arange(n), 1.0
    normals = np.zeros((n, 3))
    normals[:, 0] = 1.0  # of no account: the whole strength acts across as well
    return Observations(corners, weights, np.full((n, 6), -1), anchors, normals, strengths, np.ones(n))


@inner_kernel
def _residual(o, k, points, r):  # type: ignore[no-untyped-def]
    """Residual vector of observation k into r; returns its part along the normal."""
    for i in range(3):
        r[i] = -o.anchors[k, i]
        for c in range(4):
            if o.weights[k, c] != 0.0:
                r[i] += o.weights[k, c] * points[o.corners[k, c], i]
    return r[0] * o.normals[k, 0] + r[1] * o.normals[k, 1] + r[2] * o.normals[k, 2]


@kernel
def misfit(o, points):  # type: ignore[no-untyped-def]
    """Sum of the weighted squared residuals."""
    total = 0.0
    r = np.empty(3)
    for k in range(len(o.strengths)):
        along = _residual(o, k, points, r)
        squared = r[0] * r[0] + r[1] * r[1] + r[2] * r[2]
        total += o.strengths[k] * (o.across[k] * squared + (1.0 - o.across[k]) * along * along)
    return total


@kernel
def add_pull(o, points, pattern, gradient, rows):  # type: ignore[no-untyped-def]
    """Add first and second derivatives of `misfit` to a block system; returns the misfit."""
    total = 0.0
    r = np.empty(3)
    m = np.empty((3, 3))
    for k in range(len(o.strengths)):
        strength = o.strengths[k]
        if strength == 0.0:
            continue
        along = _residual(o, k, points, r)
        squared = r[0] * r[0] + r[1] * r[1] + r[2] * r[2]
        total += strength * (o.across[k] * squared + (1.0 - o.across[k]) * along * along)
        for i in range(3):
            for j in range(3):
                m[i, j] = 2.0 * strength * (1.0 - o.across[k]) * o.normals[k, i] * o.normals[k, j]
            m[i, i] += 2.0 * strength * o.across[k]
        e = -1
        for a in range(4):
            wa = o.weights[k, a]
            if wa != 0.0:
                p = o.corners[k, a]
                for i in range(3):
                    gradient[p, i] += wa * (m[i, 0] * r[0] + m[i, 1] * r[1] + m[i, 2] * r[2])
                    for j in range(3):
                        rows[pattern.own_slot[p], i, j] += wa * wa * m[i, j]
            for b in range(a + 1, 4):
                e += 1
                both = wa * o.weights[k, b]
                if both != 0.0:
                    for i in range(3):
                        for j in range(3):
                            rows[pattern.edge_slot[o.edges[k, e], 0], i, j] += both * m[i, j]
                            rows[pattern.edge_slot[o.edges[k, e], 1], i, j] += both * m[i, j]
    return total
