"""Polylines: CSV with ``line,x_mm,y_mm,z_mm``, one point a row in order, or the lines of a .vtp or .vtk.

Coordinates are world millimetres, RAS+.  In CSV the rows of one line follow each other; the lines of
the other two are called 1, 2, 3 and so on, and keep that order.
"""

from __future__ import annotations

import os

import numpy as np

from volmap.io.csv_columns import read_columns, read_header, write_columns
from volmap.io.opening import shown_name
from volmap.io.vtk_legacy import read_legacy
from volmap.io.vtk_xml import coordinates, write_lines
from volmap.io.vtk_xml_reading import VtkPiece, read_piece
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.polylines import Polylines

LINE_COLUMNS = ("line", "x_mm", "y_mm", "z_mm")
PathLike = str | os.PathLike[str]


def read_polylines(path: PathLike) -> tuple[Polylines, tuple[Finding, ...]]:
    """Lines, and what was left out of them.

    Raises
    ------
    InputError
        Damaged, another header, a line of one point, rows of a line that do not follow each other.
    """
    if os.fspath(path).lower().endswith((".vtp", ".vtk")):
        return _from_polygons(path)
    return _from_csv(path), ()


def write_polylines(path: PathLike, lines: Polylines, *, overwrite: bool = False) -> None:
    """Write lines as CSV or, by the name's ending, .vtp (with the cell array `length_mm`)."""
    if os.fspath(path).lower().endswith(".vtp"):
        write_lines(path, lines, cell_data={"length_mm": lines.lengths_mm}, overwrite=overwrite)
        return
    names = [lines.names[i] for i in lines.line_of_point.tolist()]
    columns = {c: lines.points[:, i] for i, c in enumerate(LINE_COLUMNS[1:])}
    write_columns(path, {"line": names, **columns}, overwrite=overwrite)


def holds_lines(path: PathLike) -> bool:
    """Whether a .vtp or .vtk holds lines and no polygons.

    Raises
    ------
    InputError
        Damaged.
    """
    kind, piece = _piece(path)
    counts = piece.counts
    return kind == "PolyData" and bool(counts.get("NumberOfLines", 0)) and not counts.get("NumberOfPolys", 0)


def _piece(path: PathLike) -> tuple[str, VtkPiece]:
    if os.fspath(path).lower().endswith(".vtk"):
        return read_legacy(path)
    return "PolyData", read_piece(path, "PolyData")


def _from_csv(path: PathLike) -> Polylines:
    where, header = shown_name(path), read_header(path)
    if header != LINE_COLUMNS:
        raise InputError(
            "the header is not that of lines", where=where, found=",".join(header)[:80],
            expected=",".join(LINE_COLUMNS), remedy="measurements go into a table of their own",
        )  # fmt: skip
    columns = read_columns(path, ("line",))
    names = np.array(columns.texts["line"], dtype=object)
    points = np.stack([columns.numbers[c] for c in LINE_COLUMNS[1:]], axis=1)
    lost = np.flatnonzero(~np.isfinite(points).all(axis=1) | (names == ""))
    if len(lost) or not len(names):
        raise InputError(
            "a point lacks its line or a finite coordinate" if len(names) else "the file holds no line",
            where=f"{where}, row {lost[0] + 2}" if len(names) else where,
            remedy="correct it or drop the row",
        )
    starts = np.flatnonzero(np.append(True, names[1:] != names[:-1]))
    own = tuple(names[starts].tolist())
    if len(set(own)) < len(own):
        twice = next(name for i, name in enumerate(own) if name in own[:i])
        raise InputError(
            "the rows of a line do not follow each other", where=where, found=f"line {twice[:40]} twice",
            remedy="sort the rows, or give each line a name of its own",
        )  # fmt: skip
    return _made(own, points, np.append(starts, len(names)), where)


def _from_polygons(path: PathLike) -> tuple[Polylines, tuple[Finding, ...]]:
    where = shown_name(path)
    _, piece = _piece(path)
    points = coordinates(piece, where)
    arrays = piece.sections.get("Lines", {})
    flat, ends = (arrays.get(name, np.empty(0, np.int64)) for name in ("connectivity", "offsets"))
    whole = flat.dtype.kind in "iu" and ends.dtype.kind in "iu" and flat.ndim == ends.ndim == 1
    ends = ends.astype(np.int64) if whole else ends
    if not whole or not len(ends) or ends[-1] != len(flat) or (np.diff(ends, prepend=0) < 2).any():
        raise InputError("holds no lines of two points or more", where=where)
    if flat.min() < 0 or flat.max() >= len(points):
        raise InputError("a line names a point that does not exist", where=where)
    others = [k for k in ("Verts", "Polys", "Strips") if piece.counts.get(f"NumberOf{k}", 0)]
    data = [n for part in ("PointData", "CellData") for n in piece.sections.get(part, {}) if n != "length_mm"]
    findings = []
    if others or data:
        named = ", ".join([*(o.lower() for o in others), *data])
        sentence = f"only its lines are carried; left out: {named}"
        findings.append(Finding(Level.WARN, "left-out", where, sentence))
    names = tuple(str(i + 1) for i in range(len(ends)))
    lines = _made(names, points[flat.astype(np.int64)], np.append(0, ends), where)
    return lines, tuple(findings)


def _made(names: tuple[str, ...], points: object, starts: object, where: str) -> Polylines:
    try:
        return Polylines(names, points, starts)  # type: ignore[arg-type]
    except InputError as fault:
        raise fault.at(f"{where}, {fault.where}") from fault
