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
from volmap.io.opening import existing_file, shown_name
from volmap.types.errors import InputError
from volmap.types.notice import caution
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh

PathLike = str | os.PathLike[str]
Arrays = Mapping[str, NDArray[Any]]
FieldData = Mapping[str, str | float | int | NDArray[Any]]
FRAME, UNITS = "RAS+ mm", "mm"
_TET, _TRIANGLE, _APPENDED = 10, 5, 2
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
    from vtkmodules.vtkIOXML import vtkXMLUnstructuredGridReader

    where = shown_name(path)
    data = _read(path, vtkXMLUnstructuredGridReader(), "UnstructuredGrid")
    if not data.GetNumberOfCells() or not data.GetNumberOfPoints():
        raise InputError("holds no mesh", where=where, expected="tetrahedra")
    kinds = np.unique(_bridge().vtk_to_numpy(data.GetCellTypesArray()))
    if kinds.tolist() != [_TET]:
        raise InputError(
            "holds other cells than tetrahedra", where=where, found=f"VTK cell types {kinds.tolist()}"
        )
    tets = _connectivity(data.GetCells(), 4, where)
    cell_data = _arrays(data.GetCellData(), where)
    labels = _whole(cell_data.pop("label", None), "label", where)
    point_data, field_data = _arrays(data.GetPointData(), where), _field_data(data.GetFieldData())
    try:
        return TetMesh(_coordinates(data), tets, labels), point_data, cell_data, field_data
    except InputError as fault:
        raise fault.at(where) from fault


def read_surface(path: PathLike) -> Surface:
    """Read a labelled surface from .vtp.

    Raises
    ------
    InputError
        Not VTP, damaged, other cells than triangles, or no `label_inside` and `label_outside`.
    """
    from vtkmodules.vtkIOXML import vtkXMLPolyDataReader

    where = shown_name(path)
    data = _read(path, vtkXMLPolyDataReader(), "PolyData")
    if not data.GetNumberOfPolys() or data.GetNumberOfPolys() != data.GetNumberOfCells():
        raise InputError("holds no surface of triangles alone", where=where)
    triangles = _connectivity(data.GetPolys(), 3, where)
    cell_data = _arrays(data.GetCellData(), where)
    sides = [_whole(cell_data.get(name), name, where) for name in ("label_inside", "label_outside")]
    try:
        return Surface(_coordinates(data), triangles, np.stack(sides, axis=1))
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


def _read(path: PathLike, reader: Any, kind: str) -> Any:
    file = existing_file(path)
    where = shown_name(path)
    with file.open("rb") as stream:
        first = stream.read(4096)
    if b"<VTKFile" not in first or f'type="{kind}"'.encode() not in first:
        raise InputError("is not the VTK XML file it should be", where=where, expected=f"VTKFile of {kind}")
    with _captured() as said:
        reader.SetFileName(os.fspath(file))
        reader.Update()
        faults = said.GetOutput() or ("damaged" if reader.GetErrorCode() else "")
    if faults:
        raise InputError(
            "the VTK XML file is damaged or cut short", where=where, remedy="write or copy the file again"
        )
    return reader.GetOutput()


def _coordinates(data: Any) -> NDArray[np.float64]:
    return np.array(_bridge().vtk_to_numpy(data.GetPoints().GetData()), np.float64)


def _connectivity(cells: Any, corners: int, where: str) -> NDArray[np.int64]:
    flat = np.array(_bridge().vtk_to_numpy(cells.GetConnectivityArray()), np.int64)
    offsets = np.array(_bridge().vtk_to_numpy(cells.GetOffsetsArray()), np.int64)
    if not np.array_equal(offsets, np.arange(0, len(flat) + 1, corners)):
        raise InputError(f"holds cells that do not have {corners} corners", where=where)
    return flat.reshape(-1, corners)


def _arrays(attributes: Any, where: str) -> dict[str, NDArray[Any]]:
    found: dict[str, NDArray[Any]] = {}
    for i in range(attributes.GetNumberOfArrays()):
        array = attributes.GetArray(i)
        if array is None or array.GetName() in found:
            raise InputError("holds an array that is not numbers, or one twice", where=where)
        found[str(array.GetName())] = np.array(_bridge().vtk_to_numpy(array))
    return found


def _field_data(attributes: Any) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for i in range(attributes.GetNumberOfArrays()):
        array = attributes.GetAbstractArray(i)
        if array.IsA("vtkStringArray"):
            values = [array.GetValue(k) for k in range(array.GetNumberOfValues())]
            found[str(array.GetName())] = values[0] if len(values) == 1 else values
        elif attributes.GetArray(i) is not None:
            found[str(array.GetName())] = np.array(_bridge().vtk_to_numpy(attributes.GetArray(i)))
    return found


def _whole(values: NDArray[Any] | None, name: str, where: str) -> NDArray[np.int64]:
    if values is None or values.ndim != 1 or values.dtype.kind not in "iu":
        raise InputError(f"holds no whole number `{name}` for each cell", where=where)
    return values.astype(np.int64)
