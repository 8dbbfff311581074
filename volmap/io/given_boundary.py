"""A given boundary correspondence: a surface with `image_mm` on its points.

Read: VTP of triangles, VTU of triangles or of tets (then its boundary counts, and what lies between its
labels), and what meshio reads of the formats in `surfaces.FORMATS` that can hold point data (VTK, PLY, gmsh).
PLY has no vectors: three properties `image_mm_x`, `image_mm_y`, `image_mm_z` (or with 0, 1, 2) stand for one.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import all_bytes, existing_file, shown_name
from volmap.io.surfaces import FORMATS, LARGEST_MM, parsed
from volmap.io.vtk_xml import PathLike, cells_of_kind, coordinates, write_surface
from volmap.io.vtk_xml_reading import read_piece
from volmap.kernels.topology import interfaces
from volmap.types.errors import InputError
from volmap.types.given_boundary import GivenBoundary
from volmap.types.surface import Surface

IMAGE = "image_mm"
_TRIANGLE, _TET = 5, 10
_Part = tuple[NDArray[np.float64], NDArray[np.int64], Mapping[str, NDArray[Any]], Mapping[str, Any]]


def read_given_boundary(
    path: PathLike, *, tolerance_mm: float | None = None, reach_mm: float | None = None
) -> GivenBoundary:
    """Read a surface with `image_mm`, where each of its points goes.

    Parameters
    ----------
    path : path
    tolerance_mm, reach_mm : float, optional
        See `GivenBoundary`; what the file says of them itself (as one in a map folder does) stands back.

    Raises
    ------
    InputError
        Not readable, no triangles, no point array `image_mm` of three components, values not finite, or no
        tolerance from anywhere.
    """
    file, where = existing_file(path), shown_name(path)
    suffix = Path(path).suffix.lower()
    if suffix == ".vtp":
        points, triangles, arrays, told = _from_vtp(path, where)
    elif suffix == ".vtu":
        points, triangles, arrays, told = _from_vtu(path, where)
    else:
        points, triangles, arrays, told = _from_meshio(file, where)
    if not len(triangles):
        raise InputError(
            "holds no triangles",
            where=where,
            expected="a surface of triangles with `image_mm` on its points",
            remedy="triangulate it and write it again",
        )
    if triangles.min() < 0 or triangles.max() >= len(points):
        raise InputError("a triangle names a point that does not exist", where=where)
    images = _images(arrays, len(points), where)
    used = np.unique(triangles)
    for values, what in ((points, "points"), (images, f"values of `{IMAGE}`")):
        _require_finite(values, used, what, where)
    try:
        return GivenBoundary(
            points[used],
            np.searchsorted(used, triangles),
            images[used],
            _number(told, "tolerance_mm", tolerance_mm, where),
            _number(told, "reach_mm", reach_mm, where),
            where,
        )
    except InputError as fault:
        raise fault.at(where) from fault


def _require_finite(values: NDArray[np.float64], used: NDArray[np.int64], what: str, where: str) -> None:
    bad = ~(np.abs(values[used]) < LARGEST_MM).all(axis=1)
    if bad.any():
        raise InputError(
            f"some {what} are not finite",
            where=where,
            found=f"{int(bad.sum())} of {len(used)}, the first at point {int(used[bad.argmax()])}",
            expected=f"coordinates below {LARGEST_MM:g} mm",
            remedy="leave out the triangles of points that have no image",
        )


def write_given_boundary(path: PathLike, given: GivenBoundary, *, overwrite: bool = False) -> None:
    """Write it as .vtp, with its tolerance, reach and name in the field data.

    Raises
    ------
    InputError
        As `write_surface`.
    """
    sides = np.tile([1, 0], (len(given.triangles), 1))
    told: dict[str, str | float] = {
        "name": given.name,
        "tolerance_mm": given.tolerance_mm,
        "reach_mm": given.reach_mm,
    }
    write_surface(
        path,
        Surface(given.points, given.triangles, sides),
        point_data={IMAGE: given.images},
        field_data=told,
        overwrite=overwrite,
    )


def _from_vtp(path: PathLike, where: str) -> _Part:
    piece = read_piece(path, "PolyData")
    others = [k for k in ("Verts", "Lines", "Strips") if piece.counts.get(f"NumberOf{k}", 0)]
    if others:
        raise InputError(
            "holds other cells than triangles",
            where=where,
            found=", ".join(others).lower(),
            remedy="keep its polygons only, triangulated",
        )
    if not piece.counts.get("NumberOfPolys", 0):
        return np.empty((0, 3)), np.empty((0, 3), np.int64), {}, {}
    triangles = cells_of_kind(piece, "Polys", 3, where)
    return coordinates(piece, where), triangles, piece.sections.get("PointData", {}), piece.field_data


def _from_vtu(path: PathLike, where: str) -> _Part:
    piece = read_piece(path, "UnstructuredGrid")
    kinds = np.unique(piece.sections.get("Cells", {}).get("types", ())).astype(int).tolist()
    arrays = piece.sections.get("PointData", {})
    if kinds == [_TRIANGLE]:
        return coordinates(piece, where), cells_of_kind(piece, "Cells", 3, where), arrays, piece.field_data
    if kinds != [_TET]:
        raise InputError(
            "holds neither triangles nor tets alone",
            where=where,
            found=f"VTK cell types {kinds}",
            expected=f"{_TRIANGLE} or {_TET}",
        )
    points, tets = coordinates(piece, where), cells_of_kind(piece, "Cells", 4, where)
    labels = piece.sections.get("CellData", {}).get("label", np.ones(len(tets), np.int64))
    if len(labels) != len(tets) or tets.min() < 0 or tets.max() >= len(points):
        raise InputError("its tets contradict its points or labels", where=where)
    triangles, _ = interfaces(tets, labels.astype(np.int64))
    return points, triangles, arrays, piece.field_data


def _from_meshio(file: Path, where: str) -> _Part:
    if file.suffix.lower() == ".vtk" and b"DATASET POLYDATA" in all_bytes(file)[:512].upper():
        raise InputError("legacy VTK PolyData cannot be read", where=where, remedy="save it as .vtp")
    mesh = parsed(file, where, formats={".vtp": "", ".vtu": ""} | FORMATS)
    kinds = sorted({block.type for block in mesh.cells if len(block.data)} - {"vertex", "line", "triangle"})
    if kinds:
        raise InputError(
            "holds other cells than triangles",
            where=where,
            found=", ".join(kinds),
            remedy="triangulate it first",
        )
    blocks = [np.asarray(b.data, np.int64) for b in mesh.cells if b.type == "triangle" and len(b.data)]
    triangles = np.concatenate(blocks) if blocks else np.empty((0, 3), np.int64)
    points = np.asarray(mesh.points, np.float64)
    if points.ndim != 2 or points.shape[1] != 3:
        raise InputError("its points are not triples", where=where, found=str(points.shape))
    return points, triangles, mesh.point_data, {}


def _images(arrays: Mapping[str, NDArray[Any]], n: int, where: str) -> NDArray[np.float64]:
    values = arrays.get(IMAGE)
    for ends in ("xyz", "012"):
        parts = [arrays.get(f"{IMAGE}_{end}") for end in ends]
        if values is None and all(part is not None for part in parts):
            values = np.stack([np.asarray(part) for part in parts], axis=-1)
    if values is None:
        raise InputError(
            f"holds no point array `{IMAGE}`",
            where=where,
            found=", ".join(sorted(map(str, arrays))) or "no point data",
            expected=f"`{IMAGE}`, three components: where each point goes in TARGET, mm",
            remedy="name the array so, on the points, not on the triangles",
        )
    if np.shape(values) != (n, 3) or np.asarray(values).dtype.kind not in "fiu":
        raise InputError(
            f"`{IMAGE}` does not fit the points",
            where=where,
            found=f"{np.asarray(values).dtype} of shape {np.shape(values)}",
            expected=f"numbers of shape ({n}, 3)",
        )
    return np.asarray(values, np.float64)


def _number(told: Mapping[str, Any], name: str, given: float | None, where: str) -> float:
    if given is not None:
        return given
    try:
        return float(np.asarray(told[name], np.float64).reshape(-1)[0])
    except (KeyError, ValueError, TypeError, IndexError) as fault:
        raise InputError(
            f"does not say its {name}", where=where, expected="a number in its field data"
        ) from fault
