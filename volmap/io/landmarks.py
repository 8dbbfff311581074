"""Landmark files: CSV in UTF-8, world millimetres RAS+.

Points of one scan: ``name,x_mm,y_mm,z_mm[,role][,sd_mm]``.  Pairs of two scans:
``name,x_mm,y_mm,z_mm,to_x_mm,to_y_mm,to_z_mm[,role][,sd_mm]``.
"""

from __future__ import annotations

import csv
import io
import math
import os
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.csv_columns import read_columns, read_header
from volmap.io.opening import all_text, existing_file, shown_name
from volmap.types.errors import InputError
from volmap.types.landmarks import ROLES, LandmarkPairs, Landmarks

POINT_COLUMNS = ("name", "x_mm", "y_mm", "z_mm")
PAIR_COLUMNS = (*POINT_COLUMNS, "to_x_mm", "to_y_mm", "to_z_mm")
OPTIONAL_COLUMNS = ("role", "sd_mm")
_LARGE = 2**18  # bytes from which on reading by columns pays


@dataclass(frozen=True)
class _Table:
    names: tuple[str, ...]
    numbers: NDArray[np.float64]
    roles: tuple[str, ...]
    sd_mm: NDArray[np.float64] | None


def read_landmarks(path: str | os.PathLike[str]) -> Landmarks:
    """Named points of one scan.

    Raises
    ------
    InputError
        With the line: wrong header, a number that is none or not finite, a name twice or both guide
        and check, an unknown role, an sd_mm not above 0, no landmark at all.
    """
    table = _read(path, POINT_COLUMNS)
    return Landmarks(table.names, table.numbers, table.roles, table.sd_mm)


def read_pairs(path: str | os.PathLike[str]) -> LandmarkPairs:
    """Named points of one scan with their partners in the other.

    Raises
    ------
    InputError
        As `read_landmarks`.
    """
    table = _read(path, PAIR_COLUMNS)
    return LandmarkPairs(table.names, table.numbers[:, :3], table.numbers[:, 3:], table.roles, table.sd_mm)


def write_landmarks(path: str | os.PathLike[str], landmarks: Landmarks, *, overwrite: bool = False) -> None:
    """Write points of one scan; coordinates in the shortest form that reads back to the same number."""
    _write(path, landmarks.points, landmarks, overwrite=overwrite)


def write_pairs(path: str | os.PathLike[str], pairs: LandmarkPairs, *, overwrite: bool = False) -> None:
    """Write pairs of two scans."""
    _write(path, np.concatenate([pairs.points, pairs.to_points], axis=1), pairs, overwrite=overwrite)


def _write(
    path: str | os.PathLike[str],
    numbers: NDArray[np.float64],
    marks: Landmarks | LandmarkPairs,
    *,
    overwrite: bool,
) -> None:
    headings = POINT_COLUMNS if numbers.shape[1] == 3 else PAIR_COLUMNS
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    sd = marks.sd_mm
    writer.writerow((*headings, "role") if sd is None else (*headings, *OPTIONAL_COLUMNS))
    columns = [marks.names, *(map(repr, column) for column in (numbers.T + 0.0).tolist()), marks.roles]
    writer.writerows(zip(*columns if sd is None else [*columns, map(repr, sd.tolist())], strict=True))
    with whole_file(path, overwrite=overwrite) as temporary:
        temporary.write_bytes(text.getvalue().encode("utf-8"))


def _read(path: str | os.PathLike[str], columns: tuple[str, ...]) -> _Table:
    where = shown_name(path)
    if existing_file(path).stat().st_size > _LARGE:
        table = _read_fast(path, columns)
        if table is not None:
            return table
    rows = _rows(all_text(path, limit=2**28), where)
    if not rows:
        raise InputError("the file holds no header", where=where, expected=",".join(columns))
    header = _checked_header(rows[0][1], columns, f"{where}, line {rows[0][0]}")
    seen: dict[str, str] = {}
    parsed = [_parse(cells, header, seen, f"{where}, line {line}") for line, cells in rows[1:]]
    if not parsed:
        raise InputError("the file holds no landmark", where=where, remedy="add one line a landmark")
    numbers = np.array([p[1] for p in parsed], np.float64)
    k = len(columns) - 1
    return _Table(
        tuple(p[0] for p in parsed),
        numbers[:, :k],
        tuple(p[2] for p in parsed) if "role" in header else (),
        numbers[:, k] if "sd_mm" in header else None,
    )


def _read_fast(path: str | os.PathLike[str], columns: tuple[str, ...]) -> _Table | None:
    """A large file by columns; None when anything is amiss, for the slow reader to say what and where."""
    try:
        header = _checked_header(read_header(path), columns, "")
        found = read_columns(path, tuple(c for c in ("name", "role") if c in header))
    except InputError:
        return None
    names, roles = found.texts["name"], found.texts.get("role", ())
    numbers = np.stack([found.numbers[c] for c in columns[1:]], axis=1)
    sd = found.numbers.get("sd_mm")
    sound = len(names) > 0 and all(names) and len(set(names)) == len(names) and set(roles) <= set(ROLES)
    if not sound or not np.isfinite(numbers).all() or (sd is not None and not (sd > 0).all()):
        return None
    return _Table(names, numbers, roles, sd) if sd is None or np.isfinite(sd).all() else None


def _rows(text: str, where: str) -> list[tuple[int, list[str]]]:
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    rows = []
    try:
        for cells in reader:
            if any(cell.strip() for cell in cells):
                rows.append((reader.line_num, [cell.strip() for cell in cells]))
    except csv.Error as fault:
        raise InputError(
            "the line is not CSV", where=f"{where}, line {reader.line_num}", found=str(fault)
        ) from fault
    return rows


def _checked_header(header: Sequence[str], columns: tuple[str, ...], where: str) -> list[str]:
    extra = list(header[len(columns) :])
    fits = tuple(header[: len(columns)]) == columns and len(set(extra)) == len(extra)
    if not fits or not set(extra) <= set(OPTIONAL_COLUMNS):
        raise InputError(
            "the header is not that of a landmark file"
            if len(columns) == 4
            else "the header is not that of pairs",
            where=where,
            found=",".join(header)[:80],
            expected=",".join(columns) + "[,role][,sd_mm]",
            remedy="coordinates are world millimetres, RAS+, separated by commas",
        )
    return list(header)


def _parse(
    cells: list[str], header: list[str], seen: dict[str, str], where: str
) -> tuple[str, list[float], str]:
    if len(cells) != len(header):
        raise InputError(
            "a line has the wrong number of columns",
            where=where,
            found=str(len(cells)),
            expected=str(len(header)),
            remedy="give every column of the header a value, commas between them",
        )
    values = dict(zip(header, cells, strict=True))
    name, role = values["name"], values.get("role", "check")
    _check_name(name, role, seen, where)
    numbers = [_number(values[c], c, where) for c in header if c not in ("name", "role", "sd_mm")]
    if "sd_mm" in values:
        sd = _number(values["sd_mm"], "sd_mm", where)
        if sd <= 0:
            raise InputError(
                "sd_mm is not above 0",
                where=where,
                found=values["sd_mm"],
                remedy="give the uncertainty in mm",
            )
        numbers.append(sd)
    return name, numbers, role


def _check_name(name: str, role: str, seen: dict[str, str], where: str) -> None:
    if not name:
        raise InputError("a landmark has no name", where=where, remedy="name it in the first column")
    if role not in ROLES:
        raise InputError(
            "a landmark's role is unknown",
            where=where,
            found=repr(role[:20]),
            expected="guide or check",
            remedy="write guide for one that steers the map, check for one that only measures it",
        )
    if name in seen:
        both = seen[name] != role
        raise InputError(
            "a landmark is both guide and check" if both else "a landmark's name stands twice",
            where=where,
            found=repr(name[:40]),
            remedy="a landmark that steers the map cannot also measure it; keep one"
            if both
            else "rename one",
        )
    seen[name] = role


def _number(text: str, column: str, where: str) -> float:
    try:
        value = float(text) if "_" not in text else math.nan
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(
            f"{column} is not a finite number",
            where=where,
            found=repr(text[:20]),
            expected="a number in mm",
            remedy="correct it, with a point for decimals, or drop the line",
        )
    return value
