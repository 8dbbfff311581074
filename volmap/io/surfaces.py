"""Closed triangle surfaces from other programs: STL, PLY, OFF, OBJ, VTK and more.

These formats state neither frame nor unit: world millimetres, RAS+, are assumed.
"""

from __future__ import annotations

import os

import numpy as np
from numpy.typing import NDArray

from volmap.io.mesh_parts import LARGEST_MM, NONE, MeshParts, read_parts
from volmap.io.opening import shown_name
from volmap.kernels.topology import interfaces
from volmap.types.errors import InputError


def read_closed_surface(
    path: str | os.PathLike[str],
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Read a closed, consistently turned triangle surface; of a solid of tets of one label its boundary.

    Points at exactly the same place become one, and points no triangle uses are left out.

    Returns
    -------
    points : (n, 3) float64, mm, RAS+
    triangles : (m, 3) int64
        Normals point outward (the enclosed volume is positive).

    Raises
    ------
    InputError
        Format unknown, file damaged, no triangles or other faces beside them, values not finite, open
        edges, edges shared by more than two triangles or turned both ways, no volume enclosed.
    """
    where = shown_name(path)
    points, triangles = _triangles(path, where)
    points, triangles, _ = welded(points, triangles)
    _require_closed(triangles, where)
    volume = _enclosed_mm3(points, triangles)
    if not abs(volume) > 1e-9 * float(np.ptp(points, axis=0).max()) ** 3:
        raise InputError("the surface encloses no volume", where=where, refused=True)
    return points, triangles if volume > 0 else np.ascontiguousarray(triangles[:, ::-1])


def _triangles(path: str | os.PathLike[str], where: str) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    parts = read_parts(path)
    try:
        triangles, tets = parts.of_kind("triangle"), parts.of_kind("tetra")
    except InputError as fault:
        raise fault.at(where) from fault
    if len(tets) and not len(triangles):
        triangles = _around(tets, parts, where)
    elif len(tets):
        raise InputError(
            "holds triangles and tets", where=where, found=f"{len(triangles)} and {len(tets)}",
            expected="a surface, or tets of one label", remedy="keep one of them",
        )  # fmt: skip
    if not len(triangles):
        raise InputError(
            "the surface file holds no triangle; it is empty, damaged or cut short", where=where,
            remedy="export it again",
        )  # fmt: skip
    if not (np.abs(parts.points) < LARGEST_MM).all():
        raise InputError(
            "the points are not finite triples", where=where, expected=f"coordinates below {LARGEST_MM:g} mm"
        )
    return parts.points, triangles


def _around(tets: NDArray[np.int64], parts: MeshParts, where: str) -> NDArray[np.int64]:
    """The boundary of a solid of tets."""
    labels = parts.cell_data.get("label", NONE)[parts.rows["tetra"] if "label" in parts.cell_data else NONE]
    if len(np.unique(labels)) > 1:
        raise InputError(
            "holds tets of several labels, which cannot be meshed anew", where=where,
            found=f"{len(np.unique(labels))} labels", expected="a closed surface, or a solid of one label",
            remedy="mesh the label volume, or carry this mesh as it is", refused=True,
        )  # fmt: skip
    return interfaces(tets, np.ones(len(tets), np.int64))[0]


def welded(
    points: NDArray[np.float64], triangles: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.int64]]:
    """One point a place, and no triangle that has lost a corner thereby.

    Returns
    -------
    points : (n, 3) float64
    triangles : (m, 3) int64
    kept : (m,) int64
        Rows of the triangles that are left.
    """
    _, first, index = np.unique(points + 0.0, axis=0, return_index=True, return_inverse=True)
    triangles = first[index.reshape(-1)[triangles]]
    a, b, c = triangles.T
    kept = np.flatnonzero((a != b) & (b != c) & (c != a))
    used, renumbered = np.unique(triangles[kept], return_inverse=True)
    return np.ascontiguousarray(points[used]), renumbered.reshape(-1, 3).astype(np.int64), kept


def _require_closed(triangles: NDArray[np.int64], where: str) -> None:
    if len(triangles) < 4:
        raise InputError("the surface has too few triangles", where=where, found=str(len(triangles)))
    edges = triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2)
    n = np.int64(triangles.max() + 1)
    forth, counts = np.unique(edges[:, 0] * n + edges[:, 1], return_counts=True)
    back = np.unique(edges[:, 1] * n + edges[:, 0])
    open_edges = int(np.setxor1d(forth, back).size // 2) if (counts == 1).all() else 0
    if open_edges:
        raise InputError(
            "the surface is not closed", where=where, found=f"{open_edges} open edges",
            expected="each edge shared by two triangles", remedy="close its holes first", refused=True,
        )  # fmt: skip
    if (counts > 1).any():
        raise InputError(
            "the surface has edges shared by more than two triangles, or triangles turned against their "
            "neighbours", where=where, found=f"{int((counts > 1).sum())} such edges",
            expected="each edge shared by two triangles", remedy="repair it first", refused=True,
        )  # fmt: skip


def _enclosed_mm3(points: NDArray[np.float64], triangles: NDArray[np.int64]) -> float:
    a, b, c = (points[triangles[:, i]] - points.mean(axis=0) for i in range(3))
    return float(np.einsum("ij,ij->", a, np.cross(b, c)) / 6.0)
