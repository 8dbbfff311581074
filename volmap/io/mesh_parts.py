"""What a file of cells stores: VTU, VTP, legacy VTK and what meshio reads, in one form.

World millimetres, RAS+, are taken for granted where a format states neither.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.meshio_reading import FORMATS, parsed
from volmap.io.opening import existing_file, shown_name
from volmap.io.vtk_legacy import read_legacy
from volmap.io.vtk_xml import coordinates
from volmap.io.vtk_xml_reading import VtkPiece, read_piece
from volmap.types.errors import InputError

MESH_ENDINGS = (".vtp", ".vtu", ".vtk", *FORMATS)
LARGEST_MM = 1e7
NONE = np.empty(0, np.int64)
_KINDS = {1: "vertex", 2: "vertex", 3: "line", 4: "line", 5: "triangle", 10: "tetra"}  # VTK's cell types
_OTHER_KINDS = {
    6: "triangle strip", 7: "polygon", 8: "pixel", 9: "quad", 11: "voxel", 12: "hexahedron", 13: "wedge",
    14: "pyramid", 22: "quadratic triangle", 24: "quadratic tetra", 42: "polyhedron",
}  # fmt: skip
_PASSED_OVER = ("vertex", "line")
Arrays = dict[str, NDArray[Any]]


@dataclass(frozen=True)
class MeshParts:
    """Points and cells of all kinds as stored.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
        Not looked at: there may be any number among them.
    corners, rows : mapping of str to array
        For "tetra", "triangle", "line" and "vertex", as far as there are any: corners (of lines and vertices
        only their number), and places among the file's cells.
    point_data, cell_data : dict of str to array
        One row a point, and one a cell of the file.
    told : mapping of str to str, list or array
        What the file says of itself as a whole.
    """

    points: NDArray[np.float64]
    corners: Mapping[str, NDArray[np.int64]]
    rows: Mapping[str, NDArray[np.int64]]
    point_data: Arrays
    cell_data: Arrays
    told: Mapping[str, Any] = field(default_factory=dict)

    def of_kind(self, kind: str) -> NDArray[np.int64]:
        """Corners of the tets or triangles, all of which exist.

        Raises
        ------
        InputError
            One that does not.
        """
        corners = self.corners.get(kind, np.empty((0, 4 if kind == "tetra" else 3), np.int64))
        if len(corners) and (corners.min() < 0 or corners.max() >= len(self.points)):
            raise InputError("a cell names a point that does not exist", remedy="export it again")
        return corners


def read_parts(path: str | os.PathLike[str]) -> MeshParts:
    """Read a file by its ending.

    Raises
    ------
    InputError
        Format unknown, file damaged, cells of other kinds, arrays that do not fit.
    """
    file, where = existing_file(path), shown_name(path)
    ending = file.suffix.lower()
    if ending == ".vtk":
        kind, piece = read_legacy(file)
    elif ending in (".vtu", ".vtp"):
        kind = {".vtu": "UnstructuredGrid", ".vtp": "PolyData"}[ending]
        piece = read_piece(file, kind)
    elif ending in FORMATS:
        return _from_meshio(parsed(file), where)
    else:
        raise InputError(
            "is no surface file that can be read", where=where, found=file.suffix or "no suffix",
            expected=" ".join(MESH_ENDINGS), remedy="export the surface as STL or PLY",
        )  # fmt: skip
    return _from_polygons(piece, where) if kind == "PolyData" else _from_grid(piece, where)


def _from_grid(piece: VtkPiece, where: str) -> MeshParts:
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
        _refuse_kinds([_OTHER_KINDS.get(t, f"VTK cell type {t}") for t in unknown], where)
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
    return _parts(coordinates(piece, where), corners, rows, piece, where)


def _from_polygons(piece: VtkPiece, where: str) -> MeshParts:
    others = [kind for kind in ("Verts", "Lines", "Strips") if piece.counts.get(f"NumberOf{kind}", 0)]
    if others:
        _refuse_kinds([kind.lower() for kind in others], where)
    arrays = piece.sections.get("Polys", {})
    flat, ends = (arrays.get(name, NONE) for name in ("connectivity", "offsets"))
    n = len(ends)
    if not (_are_whole(flat) and len(flat) == 3 * n and np.array_equal(ends, np.arange(3, 3 * n + 1, 3))):
        raise InputError("holds polygons that are no triangles", where=where, remedy="triangulate it first")
    corners = {"triangle": flat.astype(np.int64).reshape(-1, 3)}
    return _parts(coordinates(piece, where), corners, {"triangle": np.arange(n)}, piece, where)


def _parts(
    points: NDArray[np.float64],
    corners: Mapping[str, NDArray[np.int64]],
    rows: Mapping[str, NDArray[np.int64]],
    piece: VtkPiece,
    where: str,
) -> MeshParts:
    data = []
    n_cells = sum(len(places) for places in rows.values())
    for section, n in (("PointData", len(points)), ("CellData", n_cells)):
        arrays = dict(piece.sections.get(section, {}))
        for name, values in arrays.items():
            if len(values) != n:
                raise InputError(
                    f"the array {name!r} does not fit the mesh", where=where, found=f"{len(values)} rows",
                    expected=str(n),
                )  # fmt: skip
        data.append(arrays)
    return MeshParts(points, corners, rows, data[0], data[1], piece.field_data)


def _from_meshio(mesh: Any, where: str) -> MeshParts:
    points = np.asarray(mesh.points, np.float64)
    if not points.size:
        raise InputError(
            "holds no point; it is empty, damaged or cut short", where=where, remedy="export it again"
        )
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
    piece = VtkPiece({}, {"PointData": point_data, "CellData": cell_data}, {})
    return _parts(points, corners, rows, piece, where)


def _refuse_kinds(kinds: list[str], where: str) -> None:
    raise InputError(
        "holds cells of kinds that cannot be used", where=where, found=", ".join(kinds)[:100],
        expected="tets of four points, or triangles",
        remedy="cut its cells into tets, or its faces into triangles",
    )  # fmt: skip


def _are_whole(values: NDArray[Any]) -> bool:
    return values.dtype.kind in "iu"
