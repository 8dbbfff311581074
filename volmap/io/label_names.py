"""Tables that name labels: TSV or CSV with the columns `index` and `name`."""

from __future__ import annotations

import csv
import os
from pathlib import Path

from volmap.io.opening import all_text, shown_name
from volmap.types.errors import InputError


def read_label_names(path: str | os.PathLike[str]) -> dict[int, str]:
    """Names of labels by value; further columns are ignored.

    Raises
    ------
    InputError
        Not UTF-8, a column missing, an index that is no whole number from 0 to 65535 or stands twice,
        an empty name.
    """
    where = shown_name(path)
    lines = all_text(path, limit=2**24).splitlines()
    header = _cells(lines[0]) if lines else []
    if "index" not in header or "name" not in header:
        raise InputError(
            "the first line does not name the columns",
            where=where,
            found=repr((lines[0] if lines else "")[:60]),
            expected="index and name, separated by tabs or commas",
        )
    names: dict[int, str] = {}
    for number, line in enumerate(lines[1:], start=2):
        if line.strip():
            index, name = _row(_cells(line), header, f"{where}, line {number}")
            if index in names:
                raise InputError("an index stands twice", where=f"{where}, line {number}", found=str(index))
            names[index] = name
    return names


def sibling_names(path: str | os.PathLike[str]) -> dict[int, str]:
    """Names from a table beside a volume: `x.tsv` or `x.csv` for `x.nii.gz`, else the folder's `labels.tsv`.

    A table of another kind (no `index` and `name` columns) is passed over; none gives no names.
    """
    volume = Path(path)
    stem = volume.name.removesuffix(".gz").removesuffix(".nii")
    for name in (f"{stem}.tsv", f"{stem}.csv", "labels.tsv"):
        table = volume.with_name(name)
        if table.is_file() and table.stat().st_size and _names_columns(table):
            return read_label_names(table)
    return {}


def _names_columns(table: Path) -> bool:
    with table.open("rb") as file:
        first = file.readline(4096).decode("utf-8-sig", "replace")
    return {"index", "name"} <= set(_cells(first.rstrip("\r\n")))


def _cells(line: str) -> list[str]:
    try:
        cells = next(csv.reader([line], delimiter="\t" if "\t" in line else ","), [])
    except csv.Error:
        return []
    return [cell.strip() for cell in cells]


def _row(cells: list[str], header: list[str], where: str) -> tuple[int, str]:
    at = header.index("index"), header.index("name")
    if len(cells) <= max(at):
        raise InputError("a line has too few columns", where=where, found=str(len(cells)))
    text, name = cells[at[0]], cells[at[1]]
    if not (text.isascii() and text.isdigit() and len(text) <= 5 and int(text) <= 65535):
        raise InputError(
            "an index is no label value", where=where, found=repr(text[:20]), expected="0 to 65535"
        )
    if not name:
        raise InputError("a label has no name", where=where, found=f"index {text}")
    return int(text), name
