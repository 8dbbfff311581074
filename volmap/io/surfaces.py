"""Closed triangle surfaces from other programs: STL, PLY, OFF, OBJ and more, read with meshio.

These formats state neither frame nor unit: world millimetres, RAS+, are assumed.
"""

from __future__ import annotations

import contextlib
import importlib
import io
import os
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import existing_file, shown_name
from volmap.types.errors import InputError

FORMATS = {".stl": "stl", ".ply": "ply", ".off": "off", ".obj": "obj", ".vtk": "vtk",
           ".msh": "gmsh", ".mesh": "medit", ".wkt": "wkt"}  # fmt: skip
LARGEST_MM = 1e7
_PATIENCE = 3


def read_closed_surface(
    path: str | os.PathLike[str],
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Read a closed, consistently turned triangle surface.

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
    file, where = existing_file(path), shown_name(path)
    mesh = parsed(file, where)
    points, triangles = _triangles(mesh, where)
    points, triangles, _ = welded(points, triangles)
    _require_closed(triangles, where)
    volume = _enclosed_mm3(points, triangles)
    if not abs(volume) > 1e-9 * float(np.ptp(points, axis=0).max()) ** 3:
        raise InputError("the surface encloses no volume", where=where, refused=True)
    return points, triangles if volume > 0 else np.ascontiguousarray(triangles[:, ::-1])


def parsed(file: Path, where: str, *, formats: Mapping[str, str] = FORMATS) -> Any:
    """The meshio mesh of a surface file.

    Parameters
    ----------
    file : path
    where : str
        Its name in messages.
    formats : mapping of str to str
        Suffixes to name when the file's own is none of `FORMATS`.

    Raises
    ------
    InputError
        Format unknown, or file damaged.
    """
    kind = FORMATS.get(file.suffix.lower())
    if kind is None:
        raise InputError(
            "is no surface file that can be read", where=where, found=file.suffix or "no suffix",
            expected=" ".join(formats), remedy="export the surface as STL or PLY",
        )  # fmt: skip
    silence = io.StringIO()
    try:
        with (
            contextlib.redirect_stdout(silence),
            contextlib.redirect_stderr(silence),
            warnings.catch_warnings(),
            np.errstate(all="ignore"),
        ):
            warnings.simplefilter("ignore")
            return _by_meshio(file, kind)
    except (Exception, SystemExit) as fault:  # a foreign parser meets a broken file in any way at all
        raise InputError(
            "the surface file is damaged or not what its name says", where=where,
            expected=file.suffix.lower().lstrip(".").upper(), remedy="export it again",
        ) from fault  # fmt: skip


_IN_TEXT, _IN_BYTES = ("off", "obj", "medit"), ("ply",)  # parsers that take an open file
_INNER = {"vtk": "meshio.vtk._main", "gmsh": "meshio.gmsh.main"}  # whose `read` opens the file itself


def _by_meshio(file: Path, kind: str) -> Any:
    """Parse a file, which must not be asked for lines for ever after its end."""
    if kind in _IN_TEXT:
        with _LinesToTheEnd(io.FileIO(file)) as stream:
            return importlib.import_module(f"meshio.{kind}").read(_TextToTheEnd(stream, encoding="utf-8"))
    if kind in _IN_BYTES:
        with _LinesToTheEnd(io.FileIO(file)) as stream:
            return importlib.import_module(f"meshio.{kind}").read(stream)
    if kind in _INNER:
        with _LinesToTheEnd(io.FileIO(file)) as stream:
            return importlib.import_module(_INNER[kind]).read_buffer(stream)
    return importlib.import_module(f"meshio.{kind}").read(os.fspath(file))


class _LinesToTheEnd(io.BufferedReader):
    """A file that says so when it is asked for a line again and again after its end."""

    asked_in_vain = 0

    def readline(self, size: int | None = -1, /) -> bytes:
        line = super().readline(size)
        self.asked_in_vain += not line
        if self.asked_in_vain > _PATIENCE:
            raise EOFError
        return line


class _TextToTheEnd(io.TextIOWrapper):
    """The same for text."""

    asked_in_vain = 0

    def readline(self, size: int = -1, /) -> str:  # type: ignore[override]
        line = super().readline(size)
        self.asked_in_vain += not line
        if self.asked_in_vain > _PATIENCE:
            raise EOFError
        return line


def _triangles(mesh: Any, where: str) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    kinds = sorted({block.type for block in mesh.cells if len(block.data)} - {"vertex", "line"})
    if not kinds:
        raise InputError(
            "the surface file holds no triangle; it is empty, damaged or cut short", where=where,
            remedy="export it again",
        )  # fmt: skip
    if kinds != ["triangle"]:
        raise InputError(
            "the surface is not of triangles alone", where=where, found=", ".join(kinds),
            remedy="triangulate it first",
        )  # fmt: skip
    points = np.asarray(mesh.points, np.float64)
    blocks = [np.asarray(b.data, np.int64) for b in mesh.cells if b.type == "triangle" and len(b.data)]
    triangles = np.concatenate(blocks)
    if points.ndim != 2 or points.shape[1] != 3 or not (np.abs(points) < LARGEST_MM).all():
        raise InputError(
            "the points are not finite triples", where=where, expected=f"coordinates below {LARGEST_MM:g} mm"
        )
    if triangles.min() < 0 or triangles.max() >= len(points):
        raise InputError("a triangle names a point that does not exist", where=where)
    return points, triangles


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
