"""What a surface must be before it can be filled with tets."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from volmap.types.errors import InputError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

REMEDY = "mend the surface in the program that made it, and save it again"


def merged(points: Floats, triangles: Ints) -> tuple[Floats, Ints]:
    """Points at the same place made one (STL repeats them), unused points and flat triangles dropped."""
    unique, place = np.unique(points, axis=0, return_inverse=True)
    triangles = place.reshape(-1)[triangles]
    a, b, c = triangles.T
    triangles = triangles[(a != b) & (b != c) & (a != c)]
    kept = np.unique(triangles)
    new = np.full(len(unique), -1, np.int64)
    new[kept] = np.arange(len(kept))
    return unique[kept], new[triangles]


def enclosed_volume(points: Floats, triangles: Ints) -> float:
    """Signed volume inside a closed surface, mm3: positive when the normals point outward."""
    p = points[triangles] - points.mean(axis=0)
    return float(np.einsum("ij,ij->i", p[:, 0], np.cross(p[:, 1], p[:, 2])).sum() / 6.0)


def surface_topology(triangles: Ints) -> tuple[int, int]:
    """Pieces of a closed surface, and Euler number of the solid inside it: half that of the surface."""
    n = int(triangles.max()) + 1
    along, against = _directed_edges(triangles)
    n_edges = len(np.unique(np.minimum(along, against)))
    links = coo_matrix((np.ones(len(along), np.int8), (along // n, along % n)), shape=(n, n))
    euler = (len(np.unique(triangles)) - n_edges + len(triangles)) // 2
    return int(connected_components(links, directed=False)[0]), euler


def _directed_edges(triangles: Ints) -> tuple[Ints, Ints]:
    """Both ways of each triangle edge, as numbers: along the triangle, and against it."""
    n = np.int64(triangles.max() + 1)
    a, b = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    return a * n + b, b * n + a


def require_closed(points: Floats, triangles: Ints, *, name: str) -> None:
    """Refuse a surface that is open, branches, is turned inconsistently, or encloses nothing.

    Raises
    ------
    InputError
    """
    if not np.isfinite(points).all():
        raise _refused(
            "the surface has points that are not finite", name, "NaN or infinity", "finite numbers"
        )
    if len(triangles) < 4:
        raise _refused("the surface has too few triangles", name, str(len(triangles)), "at least 4")
    along, against = _directed_edges(triangles)
    n_pairs = len(np.unique(np.minimum(along, against)))
    counts = np.unique(np.minimum(along, against), return_counts=True)[1]
    if (counts == 1).any():
        n_open = int((counts == 1).sum())
        raise _refused("the surface is not closed", name, f"{n_open} open edges", "none")
    if (counts != 2).any():
        n_branches = int((counts != 2).sum())
        raise _refused(
            "the surface branches", name, f"{n_branches} edges with more than two triangles", "two at each"
        )
    if len(np.unique(along)) != 2 * n_pairs:
        raise _refused(
            "the surface's triangles are turned inconsistently",
            name,
            f"{2 * n_pairs - len(np.unique(along))} edges run the same way in both triangles",
            "normals that all point outward",
        )
    if abs(enclosed_volume(points, triangles)) < 1e-12 * np.ptp(points, axis=0).max() ** 3:
        raise _refused("the surface encloses nothing", name, "volume 0", "a solid")


def _refused(what: str, name: str, found: str, expected: str) -> InputError:
    return InputError(what, where=name, found=found, expected=expected, remedy=REMEDY, refused=True)
