"""VTK XML files: tetrahedral meshes (.vtu) and labelled surfaces (.vtp).

Points are world millimetres, RAS+.  The label of a tet is the cell array `label`; the sides of a triangle
are `label_inside` and `label_outside`.  Strings in the field data name frame, unit and caution.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.opening import shown_name
from volmap.io.vtk_xml_reading import VtkPiece, read_piece
from volmap.types.errors import InputError
from volmap.types.notice import caution
from volmap.types.polylines import Polylines
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh

PathLike = str | os.PathLike[str]
Arrays = Mapping[str, NDArray[Any]]
FieldData = Mapping[str, str | float | int | NDArray[Any]]
FRAME, UNITS = "RAS+ mm", "mm"
_TET, _APPENDED = 10, 2
_KEPT_TYPES = {"f": (np.float32, np.float64), "i": (np.int8, np.int16, np.int32, np.int64),
               "u": (np.uint8, np.uint16, np.uint32, np.uint64), "b": ()}  # fmt: skip


def write_mesh(
    path: PathLike,
    mesh: TetMesh,
    *,
    point_data: Arrays | None = None,
    cell_data: Arrays | None = None,
    field_data: FieldData | None = None,
    overwrite: bool = False,
) -> None:
    """Write a mesh as .vtu; the same mesh gives the same bytes.

    Parameters
    ----------
    path : path
    mesh : TetMesh
        Its labels become the cell array `label`.
    point_data, cell_data : mapping of str to array
        One row a point or a tet.
    field_data : mapping of str to str, number or array
        Added to `frame`, `units` and `notice`.

    Raises
    ------
    InputError
        The place is taken or cannot be written, or an array does not fit.
    """
    from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid
    from vtkmodules.vtkIOXML import vtkXMLUnstructuredGridWriter

    data = vtkUnstructuredGrid()
    data.SetPoints(_points(mesh.points))
    data.SetCells(_TET, _cells(mesh.tets))
    _add_arrays(data.GetPointData(), point_data or {}, len(mesh.points))
    _add_arrays(data.GetCellData(), {"label": mesh.labels} | dict(cell_data or {}), len(mesh.tets))
    _add_field_data(data.GetFieldData(), field_data or {})
    _write(path, data, vtkXMLUnstructuredGridWriter(), overwrite=overwrite)


def write_surface(
    path: PathLike,
    surface: Surface,
    *,
    point_data: Arrays | None = None,
    cell_data: Arrays | None = None,
    field_data: FieldData | None = None,
    overwrite: bool = False,
) -> None:
    """Write a labelled surface as .vtp, with the cell arrays `label_inside` and `label_outside`.

    Raises
    ------
    InputError
        As `write_mesh`.
    """
    from vtkmodules.vtkCommonDataModel import vtkPolyData
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter

    sides = {"label_inside": surface.sides[:, 0], "label_outside": surface.sides[:, 1]}
    data = vtkPolyData()
    data.SetPoints(_points(surface.points))
    data.SetPolys(_cells(surface.triangles))
    _add_arrays(data.GetPointData(), point_data or {}, len(surface.points))
    _add_arrays(data.GetCellData(), sides | dict(cell_data or {}), len(surface.triangles))
    _add_field_data(data.GetFieldData(), field_data or {})
    _write(path, data, vtkXMLPolyDataWriter(), overwrite=overwrite)


def write_lines(
    path: PathLike, lines: Polylines, *, cell_data: Arrays | None = None, overwrite: bool = False
) -> None:
    """Write polylines as .vtp; names are not kept, the order is.

    Raises
    ------
    InputError
        As `write_mesh`.
    """
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter

    cells = vtkCellArray()
    rows = np.arange(len(lines.points), dtype=np.int64)
    cells.SetData(*(_bridge().numpy_to_vtkIdTypeArray(np.array(a), deep=True) for a in (lines.starts, rows)))
    data = vtkPolyData()
    data.SetPoints(_points(lines.points))
    data.SetLines(cells)
    _add_arrays(data.GetCellData(), cell_data or {}, len(lines.names))
    _add_field_data(data.GetFieldData(), {})
    _write(path, data, vtkXMLPolyDataWriter(), overwrite=overwrite)


def read_mesh(
    path: PathLike,
) -> tuple[TetMesh, dict[str, NDArray[Any]], dict[str, NDArray[Any]], dict[str, Any]]:
    """Read a .vtu of tetrahedra.

    Returns
    -------
    mesh : TetMesh
    point_data, cell_data : dict of str to array
        Without `label`, which is in the mesh.
    field_data : dict of str to str or array

    Raises
    ------
    InputError
        Not VTU, damaged, other cells than tets, or no whole number `label` above 0 a tet.
    """
    where = shown_name(path)
    piece = read_piece(path, "UnstructuredGrid")
    kinds = np.unique(piece.sections.get("Cells", {}).get("types", ()))
    if kinds.tolist() != [_TET]:
        raise InputError(
            "does not hold tetrahedra alone",
            where=where,
            found=f"VTK cell types {kinds.astype(int).tolist()}",
        )
    tets = cells_of_kind(piece, "Cells", 4, where)
    point_data = _of_length(piece, "PointData", piece.counts.get("NumberOfPoints", -1), where)
    cell_data = _of_length(piece, "CellData", len(tets), where)
    labels = _whole(cell_data.pop("label", None), "label", where)
    try:
        mesh = TetMesh(coordinates(piece, where), tets, labels)
    except InputError as fault:
        raise fault.at(where) from fault
    return mesh, point_data, cell_data, dict(piece.field_data)


def read_surface(path: PathLike) -> Surface:
    """Read a labelled surface from .vtp.

    Raises
    ------
    InputError
        Not VTP, damaged, other cells than triangles, or no `label_inside` and `label_outside`.
    """
    where = shown_name(path)
    piece = read_piece(path, "PolyData")
    others = sum(piece.counts.get(f"NumberOf{kind}", 0) for kind in ("Verts", "Lines", "Strips"))
    if others or not piece.counts.get("NumberOfPolys", 0):
        raise InputError("does not hold a surface of triangles alone", where=where)
    triangles = cells_of_kind(piece, "Polys", 3, where)
    cell_data = _of_length(piece, "CellData", len(triangles), where)
    sides = [_whole(cell_data.get(name), name, where) for name in ("label_inside", "label_outside")]
    try:
        return Surface(coordinates(piece, where), triangles, np.stack(sides, axis=1))
    except InputError as fault:
        raise fault.at(where) from fault


def _bridge() -> Any:
    """VTK's own bridge between its arrays and numpy's."""
    from vtkmodules.util import numpy_support

    return numpy_support


def _points(points: NDArray[np.float64]) -> Any:
    from vtkmodules.vtkCommonCore import vtkPoints

    made = vtkPoints()
    made.SetData(_bridge().numpy_to_vtk(np.ascontiguousarray(points, np.float64), deep=True))
    return made


def _cells(corners: NDArray[np.int64]) -> Any:
    from vtkmodules.vtkCommonDataModel import vtkCellArray

    n, k = corners.shape
    made = vtkCellArray()
    offsets = _bridge().numpy_to_vtkIdTypeArray(np.arange(0, n * k + 1, k, dtype=np.int64), deep=True)
    made.SetData(offsets, _bridge().numpy_to_vtkIdTypeArray(np.ascontiguousarray(corners).ravel(), deep=True))
    return made


def _add_arrays(attributes: Any, arrays: Arrays, n: int) -> None:
    for name, values in arrays.items():
        if np.ndim(values) < 1 or len(values) != n:
            raise InputError("an array does not fit the mesh", where=name, found=str(np.shape(values)),
                             expected=f"{n} rows")  # fmt: skip
        attributes.AddArray(_named(name, np.asarray(values).reshape(n, -1)))


def _named(name: str, rows: NDArray[Any]) -> Any:
    if rows.dtype.kind not in _KEPT_TYPES:
        raise InputError("an array holds no numbers", where=name, found=str(rows.dtype))
    rows = rows.astype(np.uint8) if rows.dtype.kind == "b" else rows
    if rows.dtype.newbyteorder("=").type not in _KEPT_TYPES[rows.dtype.kind]:
        rows = rows.astype(np.float64)
    rows = np.ascontiguousarray(rows, rows.dtype.newbyteorder("="))
    made = _bridge().numpy_to_vtk(rows[:, 0] if rows.shape[1] == 1 else rows, deep=True)
    made.SetName(name)
    return made


def _add_field_data(attributes: Any, field_data: FieldData) -> None:
    from vtkmodules.vtkCommonCore import vtkStringArray

    for name, value in ({"frame": FRAME, "units": UNITS, "notice": caution()} | dict(field_data)).items():
        if isinstance(value, str):
            made = vtkStringArray()
            made.SetName(name)
            made.InsertNextValue(value)
        else:
            made = _named(name, np.asarray(value).reshape(-1, 1))
        attributes.AddArray(made)


def _write(path: PathLike, data: Any, writer: Any, *, overwrite: bool) -> None:
    suffix = "." + writer.GetDefaultFileExtension()
    if Path(path).suffix != suffix:
        raise InputError("is no name for this kind of file", where=shown_name(path), expected=suffix)
    with whole_file(path, overwrite=overwrite) as temporary, _captured() as said:
        writer.SetFileName(os.fspath(temporary))
        writer.SetInputData(data)
        writer.SetDataMode(_APPENDED)
        writer.EncodeAppendedDataOn()
        writer.SetCompressorTypeToZLib()
        writer.SetCompressionLevel(4)
        if not writer.Write() or writer.GetErrorCode() or said.GetOutput():
            raise InputError("cannot be written", where=shown_name(path), found="a full disk, perhaps")


@contextmanager
def _captured() -> Iterator[Any]:
    """Keep what VTK has to say off the terminal, and listen to it."""
    from vtkmodules.vtkCommonCore import vtkOutputWindow, vtkStringOutputWindow

    usual, listener = vtkOutputWindow.GetInstance(), vtkStringOutputWindow()
    vtkOutputWindow.SetInstance(listener)
    try:
        yield listener
    finally:
        vtkOutputWindow.SetInstance(usual)


def coordinates(piece: VtkPiece, where: str) -> NDArray[np.float64]:
    """(n, 3) points of a piece; InputError where they contradict themselves."""
    arrays = list(piece.sections.get("Points", {}).values())
    if len(arrays) != 1 or arrays[0].ndim != 2 or arrays[0].shape[1] != 3:
        raise InputError("holds no points", where=where)
    if len(arrays[0]) != piece.counts.get("NumberOfPoints"):
        raise InputError("the number of points contradicts itself", where=where, found=str(len(arrays[0])))
    return arrays[0].astype(np.float64)


def cells_of_kind(piece: VtkPiece, section: str, corners: int, where: str) -> NDArray[np.int64]:
    """(m, corners) corners of the cells of a section; InputError where one has more or fewer."""
    arrays = piece.sections.get(section, {})
    claimed = piece.counts.get(f"NumberOf{section}")
    flat, offsets = (arrays.get(name, np.empty(0)) for name in ("connectivity", "offsets"))
    ends = np.arange(corners, corners * len(offsets) + 1, corners)
    whole = flat.dtype.kind in "iu" and len(flat) == corners * len(offsets)
    if not whole or not len(flat) or not np.array_equal(offsets, ends):
        raise InputError(f"holds cells that do not have {corners} corners", where=where)
    if claimed is not None and claimed != len(offsets):
        raise InputError(
            "the number of cells contradicts itself", where=where, found=f"{claimed}, {len(offsets)}"
        )
    return flat.astype(np.int64).reshape(-1, corners)


def _of_length(piece: VtkPiece, section: str, n: int, where: str) -> dict[str, NDArray[Any]]:
    arrays = dict(piece.sections.get(section, {}))
    for name, values in arrays.items():
        if len(values) != n:
            raise InputError(
                f"the array {name!r} does not fit the mesh",
                where=where,
                found=f"{len(values)} rows",
                expected=str(n),
            )
    return arrays


def _whole(values: NDArray[Any] | None, name: str, where: str) -> NDArray[np.int64]:
    if values is None or values.ndim != 1 or values.dtype.kind not in "iu":
        raise InputError(f"holds no whole number `{name}` for each cell", where=where)
    return values.astype(np.int64)
