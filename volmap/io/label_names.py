"""Tables that name labels: TSV or CSV with the columns `index` and `name`, in the columns of BIDS.

Beside a volume they are found by its name, or for `_dseg` and `_probseg` by BIDS's inheritance principle.
"""

from __future__ import annotations

import csv
import os
from pathlib import Path

from volmap.io.opening import all_text, shown_name
from volmap.types.errors import InputError

_ENDINGS = (".nii", ".nrrd", ".nhdr", ".hdr", ".img")
_BIDS_KINDS = ("dseg", "probseg")
_MOST_LEVELS = 8  # folders from a file up to the dataset's own


def read_label_names(path: str | os.PathLike[str]) -> dict[int, str]:
    """Names of labels by value; further columns are ignored, `n/a` is no name.

    Raises
    ------
    InputError
        Not UTF-8, a column missing, an index that is no whole number from 0 to 65535 or stands twice,
        an empty name.
    """
    where = shown_name(path)
    lines = all_text(path, limit=2**24).splitlines()
    header = _columns(lines[0]) if lines else []
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
    return {index: name for index, name in names.items() if name != "n/a"}


def sibling_names(path: str | os.PathLike[str]) -> dict[int, str]:
    """Names from a table beside a volume, or above it in a BIDS dataset.

    Beside it: `x.tsv` or `x.csv` for `x.nii.gz`, `x.nrrd` and the like, else the folder's `labels.tsv`.  For
    a file of BIDS's kind `_dseg` or `_probseg` also the nearest table of the same kind whose entities the
    volume has too (`desc-organs_dseg.tsv`, `dseg.tsv`), in its folder and those above it up to the dataset's
    own, which holds `dataset_description.json`.  A table of another kind (no `index` and `name` columns) is
    passed over; none gives no names.

    Raises
    ------
    InputError
        A table that cannot be read, or two that apply alike.
    """
    volume = Path(path)
    stem = _stem(volume)
    for name in (f"{stem}.tsv", f"{stem}.csv", "labels.tsv"):
        table = volume.with_name(name)
        if table.is_file() and table.stat().st_size and _names_columns(table):
            return read_label_names(table)
    inherited = _inherited(volume, stem)
    return read_label_names(inherited) if inherited is not None else {}


def _stem(volume: Path) -> str:
    name = volume.name.removesuffix(".gz")
    return name.removesuffix(Path(name).suffix) if Path(name).suffix.lower() in _ENDINGS else name


def _inherited(volume: Path, stem: str) -> Path | None:
    """The nearest applicable table of a BIDS dataset (BIDS 1.10, "The Inheritance Principle")."""
    *entities, kind = stem.split("_")
    if kind not in _BIDS_KINDS:
        return None
    folders = [volume.absolute().parent, *volume.absolute().parents[1:_MOST_LEVELS]]
    tops = [i for i, folder in enumerate(folders) if (folder / "dataset_description.json").is_file()]
    for folder in folders[: tops[0] + 1] if tops else folders[:1]:
        found: list[tuple[int, Path]] = []
        for table in sorted(folder.glob(f"*{kind}.tsv")):
            *own, its_kind = table.name.removesuffix(".tsv").split("_")
            applies = its_kind == kind and set(own) <= set(entities)
            if applies and table.is_file() and table.stat().st_size and _names_columns(table):
                found.append((len(own), table))
        if found:
            return _only_nearest(found, shown_name(volume))
    return None


def _only_nearest(found: list[tuple[int, Path]], where: str) -> Path:
    most = max(n for n, _ in found)
    nearest = [table for n, table in found if n == most]
    if len(nearest) > 1:
        raise InputError(
            "two tables of names apply alike", where=where,
            found=" and ".join(shown_name(table) for table in nearest[:2]), expected="one",
            remedy="say which with --names", refused=True,
        )  # fmt: skip
    return nearest[0]


def _names_columns(table: Path) -> bool:
    try:
        with table.open("rb") as file:
            first = file.readline(4096).decode("utf-8-sig", "replace")
    except OSError:
        return True  # reading it says what is wrong
    return {"index", "name"} <= set(_columns(first.rstrip("\r\n")))


def _columns(line: str) -> list[str]:
    return [cell.lower() for cell in _cells(line)]


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
