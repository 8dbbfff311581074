"""Meshes and surfaces of any program, with the data on them: VTU, VTP, and what meshio reads.

World millimetres, RAS+, are taken for granted where a format states neither.  Tets count before triangles; a
file of triangles alone is a surface.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import existing_file, shown_name
from volmap.io.surfaces import FORMATS, LARGEST_MM, parsed, welded
from volmap.io.vtk_xml import coordinates
from volmap.io.vtk_xml_reading import VtkPiece, read_piece
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh

MESH_ENDINGS = (".vtu", ".vtp", *FORMATS)
_LABELS = ("label", "labels", "gmsh:physical", "medit:ref")  # meshio's names for the regions of two formats
_SIDES = ("label_inside", "label_outside")
_KINDS = {1: "vertex", 2: "vertex", 3: "line", 4: "line", 5: "triangle", 10: "tetra"}  # VTK's cell types
_PASSED_OVER = ("vertex", "line")
_NONE = np.empty(0, np.int64)
Arrays = dict[str, NDArray[Any]]


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


@dataclass(frozen=True)
class _Raw:
    """Cells of all kinds as stored; `rows` are their places among the file's cells."""

    points: NDArray[np.float64]
    corners: Mapping[str, NDArray[np.int64]]
    rows: Mapping[str, NDArray[np.int64]]
    point_data: Arrays
    cell_data: Arrays


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
    file, where = existing_file(path), shown_name(path)
    raw = _stored(file, where)
    kind = "tetra" if len(raw.corners.get("tetra", ())) else "triangle"
    corners, rows = raw.corners.get(kind, _NONE), raw.rows.get(kind, _NONE)
    if not len(corners):
        raise InputError(
            "holds neither tets nor triangles; it is empty, damaged or cut short", where=where,
            remedy="export it again",
        )  # fmt: skip
    if corners.min() < 0 or corners.max() >= len(raw.points):
        raise InputError("a cell names a point that does not exist", where=where, remedy="export it again")
    points, point_data = raw.points, raw.point_data
    if file.suffix.lower() == ".stl":  # has no points of its own, three a triangle
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


def _left_out(raw: _Raw, kind: str, n_points: int, where: str) -> list[Finding]:
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


def _stored(file: Path, where: str) -> _Raw:
    ending = file.suffix.lower()
    if ending == ".vtu":
        return _from_vtu(read_piece(file, "UnstructuredGrid"), where)
    if ending == ".vtp":
        return _from_vtp(read_piece(file, "PolyData"), where)
    return _from_meshio(parsed(file, where, formats={".vtu": "", ".vtp": ""} | FORMATS), where)


def _from_vtu(piece: VtkPiece, where: str) -> _Raw:
    arrays = piece.sections.get("Cells", {})
    flat, ends, types = (
        arrays.get(name, np.empty(0, np.int64)) for name in ("connectivity", "offsets", "types")
    )
    whole = all(values.ndim == 1 and _are_whole(values) for values in (flat, ends, types))
    if not whole or len(ends) != len(types) or len(types) != piece.counts.get("NumberOfCells", len(types)):
        raise InputError("its cells contradict themselves", where=where, remedy="write the file again")
    ends = ends.astype(np.int64)
    lengths = np.diff(ends, prepend=0)
    if len(ends) and (lengths.min() < 1 or ends[-1] != len(flat)):
        raise InputError("its cells contradict themselves", where=where, remedy="write the file again")
    unknown = sorted({int(t) for t in np.unique(types)} - set(_KINDS))
    if unknown:
        _refuse_kinds([f"VTK cell type {t}" for t in unknown], where)
    corners: dict[str, NDArray[np.int64]] = {}
    rows: dict[str, NDArray[np.int64]] = {}
    for kind, n in (("tetra", 4), ("triangle", 3), ("line", 2), ("vertex", 1)):
        codes = [code for code, name in _KINDS.items() if name == kind]
        rows[kind] = np.flatnonzero(np.isin(types, codes))
        if kind in _PASSED_OVER:
            corners[kind] = rows[kind][:, np.newaxis]
        elif (lengths[rows[kind]] != n).any():
            raise InputError(f"holds a {kind} that does not have {n} corners", where=where)
        else:
            corners[kind] = flat[ends[rows[kind]][:, np.newaxis] - n + np.arange(n)].astype(np.int64)
    return _raw(coordinates(piece, where), corners, rows, piece.sections, len(types), where)


def _from_vtp(piece: VtkPiece, where: str) -> _Raw:
    others = [kind for kind in ("Verts", "Lines", "Strips") if piece.counts.get(f"NumberOf{kind}", 0)]
    if others:
        _refuse_kinds([kind.lower() for kind in others], where)
    arrays = piece.sections.get("Polys", {})
    flat, ends = (arrays.get(name, _NONE) for name in ("connectivity", "offsets"))
    n = len(ends)
    if not (_are_whole(flat) and len(flat) == 3 * n and np.array_equal(ends, np.arange(3, 3 * n + 1, 3))):
        raise InputError("holds polygons that are no triangles", where=where, remedy="triangulate it first")
    corners = {"triangle": flat.astype(np.int64).reshape(-1, 3)}
    return _raw(coordinates(piece, where), corners, {"triangle": np.arange(n)}, piece.sections, n, where)


def _raw(
    points: NDArray[np.float64],
    corners: Mapping[str, NDArray[np.int64]],
    rows: Mapping[str, NDArray[np.int64]],
    sections: Mapping[str, Mapping[str, NDArray[Any]]],
    n_cells: int,
    where: str,
) -> _Raw:
    data = []
    for section, n in (("PointData", len(points)), ("CellData", n_cells)):
        arrays = dict(sections.get(section, {}))
        for name, values in arrays.items():
            if len(values) != n:
                raise InputError(
                    f"the array {name!r} does not fit the mesh", where=where, found=f"{len(values)} rows",
                    expected=str(n),
                )  # fmt: skip
        data.append(arrays)
    return _Raw(points, corners, rows, *data)


def _from_meshio(mesh: Any, where: str) -> _Raw:
    points = np.asarray(mesh.points, np.float64)
    if points.ndim != 2 or points.shape[1] != 3:
        raise InputError("its points are not triples", where=where, found=str(points.shape))
    unknown = sorted({block.type for block in mesh.cells if len(block.data)} - set(_KINDS.values()))
    if unknown:
        _refuse_kinds(unknown, where)
    starts = np.cumsum([0, *(len(block.data) for block in mesh.cells)])
    corners: dict[str, NDArray[np.int64]] = {}
    rows: dict[str, NDArray[np.int64]] = {}
    for kind in ("tetra", "triangle", "line", "vertex"):
        chosen = [i for i, block in enumerate(mesh.cells) if block.type == kind and len(block.data)]
        if chosen:
            corners[kind] = np.concatenate([np.asarray(mesh.cells[i].data, np.int64) for i in chosen])
            rows[kind] = np.concatenate([np.arange(starts[i], starts[i + 1]) for i in chosen])
    cell_data = {}
    for name, blocks in mesh.cell_data.items():
        parts = [np.asarray(part) for part in blocks]
        if parts and all(
            part.dtype.kind in "fiub" and part.shape[1:] == parts[0].shape[1:] for part in parts
        ):
            cell_data[str(name)] = np.concatenate(parts)
    arrays = {str(name): np.asarray(values) for name, values in mesh.point_data.items()}
    point_data = {name: values for name, values in arrays.items() if values.dtype.kind in "fiub"}
    sections = {"PointData": point_data, "CellData": cell_data}
    return _raw(points, corners, rows, sections, int(starts[-1]), where)


def _refuse_kinds(kinds: list[str], where: str) -> None:
    raise InputError(
        "holds cells of kinds that cannot be used", where=where, found=", ".join(kinds)[:100],
        expected="tets of four points, or triangles",
        remedy="cut its cells into tets, or its faces into triangles",
    )  # fmt: skip
