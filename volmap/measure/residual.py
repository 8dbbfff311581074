"""Where a scan's own label surface lies, seen from the map's, and the other way round."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.closest import build_tree, closest
from volmap.types import Surface

Floats = NDArray[np.float64]

# Three points a triangle, exact for quadratic functions (Strang & Fix 1973, from memory).
_QUADRATURE = np.array([[4.0, 1.0, 1.0], [1.0, 4.0, 1.0], [1.0, 1.0, 4.0]]) / 6.0


@dataclass(frozen=True, eq=False)
class Ways:
    """From samples of one surface to the closest places of another.

    Parameters
    ----------
    points : (n, 3) float64, mm
    areas : (n,) float64, mm2
        That each sample stands for.
    ends : (n, 3) float64, mm
        The closest places.
    offset_mm : (n,) float64
        Part of the way along the outward normal at its start: above 0 where the other surface lies outside.
    """

    points: Floats
    areas: Floats
    ends: Floats
    offset_mm: Floats

    @property
    def lengths_mm(self) -> Floats:
        """(n,) Lengths of the ways."""
        return np.asarray(np.linalg.norm(self.ends - self.points, axis=1))


@dataclass(frozen=True, eq=False)
class Residual:
    """What parts the map's surface of a label from the scan's own.

    Parameters
    ----------
    to_scan : Ways
        From the map's surface.
    to_map : Ways
        From the scan's surface: sees parts of it that no part of the map's comes near.
    """

    to_scan: Ways
    to_map: Ways


def boundary_residual(of_map: Surface, of_scan: Surface) -> Residual | None:
    """Compare two closed surfaces of one label, normals outward.

    Returns
    -------
    Residual or None
        None when either has no triangle: the label is not there, and nothing can be said.
    """
    if not (len(of_map.triangles) and len(of_scan.triangles)):
        return None
    return Residual(_ways(of_map, of_scan), _ways(of_scan, of_map))


def _ways(of: Surface, to: Surface) -> Ways:
    corners = of.points[of.triangles]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    length = np.linalg.norm(cross, axis=1)
    normals = np.divide(cross, length[:, None], out=np.zeros_like(cross), where=length[:, None] > 0)
    starts = np.ascontiguousarray(np.einsum("qa,tad->tqd", _QUADRATURE, corners).reshape(-1, 3))
    points, triangles = np.array(to.points), np.array(to.triangles)
    triangle, weights, _ = closest(build_tree(points, triangles), points, triangles, starts)
    ends = np.einsum("na,nad->nd", weights, points[triangles[triangle]])
    offset = np.einsum("nd,nd->n", ends - starts, np.repeat(normals, 3, axis=0))
    return Ways(starts, np.repeat(length / 6, 3), ends, offset)
