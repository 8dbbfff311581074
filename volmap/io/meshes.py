"""Meshes and surfaces of any program, with the data on them: VTU, VTP, and what meshio reads.

Tets count before triangles; a file of triangles alone is a surface.
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.mesh_parts import LARGEST_MM, MESH_ENDINGS, NONE, Arrays, MeshParts, read_parts
from volmap.io.opening import shown_name
from volmap.io.surfaces import welded
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh

__all__ = ["MESH_ENDINGS", "MeshFile", "read_mesh_file"]
_LABELS = ("label", "labels", "gmsh:physical", "medit:ref")  # meshio's names for the regions of two formats
_SIDES = ("label_inside", "label_outside")


@dataclass(frozen=True)
class MeshFile:
    """What a file of tets or triangles holds.

    Parameters
    ----------
    name : str
        File name, no folders.
    body : TetMesh or Surface
    point_data, cell_data : dict of str to array
        One row a point, and one a tet (a triangle of a surface); labels are in the body.
    findings : tuple of Finding
        Where labels came from, and what was left out.
    """

    name: str
    body: TetMesh | Surface
    point_data: Arrays
    cell_data: Arrays
    findings: tuple[Finding, ...] = ()


def read_mesh_file(path: str | os.PathLike[str]) -> MeshFile:
    """Read tets or triangles with their data.

    The label of a tet is the cell array `label`; without it `labels`, the region numbers of gmsh and medit
    files, or the only array of whole numbers; without any, every tet has label 1.  A triangle's sides are
    `label_inside` and `label_outside`, else 1 and 0.  Points that no kept cell uses are left out.

    Raises
    ------
    InputError
        Format unknown, file damaged, cells of other kinds, several arrays that could be the labels, a label
        below 1, values not finite.
    """
    where = shown_name(path)
    try:
        raw = read_parts(path)
        kind = "tetra" if len(raw.of_kind("tetra")) else "triangle"
        corners, rows = raw.of_kind(kind), raw.rows.get(kind, NONE)
    except InputError as fault:
        raise (fault if fault.where else fault.at(where)) from fault
    if not len(corners):
        raise InputError(
            "holds neither tets nor triangles; it is empty, damaged or cut short", where=where,
            remedy="export it again",
        )  # fmt: skip
    points, point_data = raw.points, raw.point_data
    if Path(path).suffix.lower() == ".stl":  # has no points of its own, three a triangle
        points, corners, kept = welded(points, corners)
        rows, point_data = rows[kept], {}
    used, corners = np.unique(corners, return_inverse=True)
    _require_finite(points[used], where)
    findings = _left_out(raw, kind, len(points) - len(used), where)
    cell_data = {name: values[rows] for name, values in raw.cell_data.items()}
    body, said = _body(points[used], corners.reshape(len(rows), -1), cell_data, where)
    point_data = {name: values[used] for name, values in point_data.items()}
    return MeshFile(where, body, point_data, cell_data, (*findings, *said))


def _body(
    points: NDArray[np.float64], corners: NDArray[np.int64], cell_data: Arrays, where: str
) -> tuple[TetMesh | Surface, tuple[Finding, ...]]:
    """The mesh or surface; the arrays that gave its labels leave the data."""
    try:
        if corners.shape[1] == 4:
            labels, said = _labels(cell_data, len(corners), where)
            return TetMesh(points, corners, labels), said
        sides, said = _sides(cell_data, len(corners), where)
        return Surface(points, corners, sides), said
    except InputError as fault:
        raise (fault if fault.where == where else fault.at(where)) from fault


def _require_finite(points: NDArray[np.float64], where: str) -> None:
    if not (np.abs(points) < LARGEST_MM).all():
        raise InputError(
            "the points are not finite triples", where=where, expected=f"coordinates below {LARGEST_MM:g} mm"
        )


def _note(code: str, where: str, sentence: str) -> Finding:
    return Finding(Level.NOTE, code, where, sentence)


def _left_out(raw: MeshParts, kind: str, n_points: int, where: str) -> list[Finding]:
    others = [f"{len(cells)} of {name}" for name, cells in raw.corners.items() if name != kind and len(cells)]
    found = []
    if others:
        sentence = f"cells of other kinds were left out: {', '.join(sorted(others))}"
        found.append(_note("cells-left-out", where, sentence))
    if n_points:
        found.append(_note("points-left-out", where, f"{n_points} points that no {kind} uses were left out"))
    return found


def _labels(cell_data: Arrays, n: int, where: str) -> tuple[NDArray[np.int64], tuple[Finding, ...]]:
    """Labels of tets by the rule of `read_mesh_file`; the array that gave them leaves the data."""
    whole = [name for name, values in cell_data.items() if values.ndim == 1 and _are_whole(values)]
    named = [name for name in _LABELS if name in cell_data and _could_count(cell_data[name])]
    if "label" in cell_data and "label" not in named:
        raise InputError(
            "its cell array `label` is not one whole number a tet", where=where, remedy="number the regions"
        )
    if not named and len(whole) > 1:
        raise InputError(
            "several cell arrays could be the labels", where=where, found=", ".join(sorted(whole))[:100],
            expected="one, or one named `label`", remedy="name the array of the labels `label`",
        )  # fmt: skip
    chosen = (named or whole or [""])[0]
    if not chosen:
        said = _note("one-label", where, "no cell array of whole numbers; every tet has label 1")
        return np.ones(n, np.int64), (said,)
    labels = cell_data.pop(chosen)
    if labels.min() < 1 or labels.max() > 65535:
        raise InputError(
            f"its labels (cell array `{chosen}`) are not from 1 to 65535", where=where,
            found=f"{labels.min():g} to {labels.max():g}",
            remedy="number the regions from 1; 0 means outside the body",
        )  # fmt: skip
    if chosen == "label":
        return labels.astype(np.int64), ()
    said = _note("labels-from", where, f"labels are those of its cell array `{chosen}`")
    return labels.astype(np.int64), (said,)


def _are_whole(values: NDArray[Any]) -> bool:
    return values.dtype.kind in "iu"


def _could_count(values: NDArray[Any]) -> bool:
    """Whole numbers, or real ones without fractions: many programs store everything as real numbers."""
    if values.ndim != 1 or values.dtype.kind not in "iuf":
        return False
    return bool(np.isfinite(values).all() and (values == np.rint(values)).all())


def _sides(cell_data: Arrays, n: int, where: str) -> tuple[NDArray[np.int64], tuple[Finding, ...]]:
    pair = [cell_data.get(name) for name in _SIDES]
    if all(side is not None and side.ndim == 1 and _are_whole(side) for side in pair):
        return np.stack([cell_data.pop(name).astype(np.int64) for name in _SIDES], axis=1), ()
    said = _note("one-label", where, "a surface without sides: label 1 inside, nothing outside")
    return np.tile(np.array([1, 0], np.int64), (n, 1)), (said,)
