"""Columns of a CSV file, fast: UTF-8, commas, one header line; out to Parquet too."""

from __future__ import annotations

import csv
import io
import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.opening import all_bytes, existing_file, shown_name
from volmap.types.errors import InputError
from volmap.types.notice import caution

_LIMIT = 2**31
_LONGEST_LINE = 2**20
_ROW, _COLUMN = re.compile(r"Row #(\d+)"), re.compile(r"In CSV column #(\d+)")
_WRONG_COUNT = re.compile(r"Expected (\d+) columns, got (\d+)")
_VALUE = re.compile(r"invalid value '(.*)'")


@dataclass(frozen=True)
class Columns:
    """Columns of a file by their headings.

    Parameters
    ----------
    numbers : mapping of str to (n,) float64
        NaN where a cell is empty.
    texts : mapping of str to tuple of str
        Without blanks around them.
    """

    numbers: Mapping[str, NDArray[np.float64]]
    texts: Mapping[str, tuple[str, ...]]


def read_header(path: str | os.PathLike[str]) -> tuple[str, ...]:
    """The headings of the columns.

    Raises
    ------
    InputError
        No file, or a first line that holds none.
    """
    file, where = existing_file(path), shown_name(path)
    with file.open("rb") as stream:
        line = stream.readline(_LONGEST_LINE)
    try:
        cells = next(csv.reader([line.decode("utf-8-sig")], strict=True), [])
    except (UnicodeDecodeError, csv.Error) as fault:
        raise InputError("the first line is no line of CSV in UTF-8", where=where) from fault
    heading = tuple(cell.strip() for cell in cells)
    if not any(heading):
        raise InputError("the file holds no header", where=where, remedy="name the columns in the first line")
    twice = next((h for h in heading if heading.count(h) > 1), None)
    if twice is not None:
        raise InputError("a column stands twice", where=f"{where}, line 1", found=repr(twice[:40]))
    return heading


def read_columns(path: str | os.PathLike[str], texts: Sequence[str]) -> Columns:
    """All columns: `texts` letter for letter, the others as numbers.

    Raises
    ------
    InputError
        With row and column: a number that is none, a row with more or fewer cells than the header.
    """
    import pyarrow
    from pyarrow import compute
    from pyarrow import csv as arrow_csv

    where, heading = shown_name(path), read_header(path)
    kinds = {h: pyarrow.string() if h in texts else pyarrow.float64() for h in heading}
    try:
        table = arrow_csv.read_csv(
            io.BytesIO(all_bytes(path, limit=_LIMIT)),
            arrow_csv.ReadOptions(
                use_threads=False, column_names=list(heading), skip_rows=1, block_size=_LONGEST_LINE * 4
            ),
            arrow_csv.ParseOptions(newlines_in_values=False),
            arrow_csv.ConvertOptions(column_types=kinds, null_values=[""], strings_can_be_null=False),
        )
    except pyarrow.ArrowInvalid as fault:
        raise _damage(str(fault), heading, where) from fault
    return Columns(
        {h: np.array(table[h].to_numpy(), np.float64) for h in heading if h not in texts},
        {h: tuple(compute.utf8_trim_whitespace(table[h]).to_pylist()) for h in heading if h in texts},
    )


def _damage(said: str, heading: tuple[str, ...], where: str) -> InputError:
    """Arrow's sentence in ours."""
    row, column = _ROW.search(said), _COLUMN.search(said)
    place = f"{where}, row {row.group(1)}" if row else where
    count = _WRONG_COUNT.search(said)
    if count:
        return InputError(
            "a row has the wrong number of columns", where=place, found=count.group(2),
            expected=count.group(1), remedy="give every column of the header a value or leave it empty",
        )  # fmt: skip
    name = heading[int(column.group(1))] if column and int(column.group(1)) < len(heading) else ""
    value = _VALUE.search(said)
    if value and name:
        return InputError(
            f"{name} is not a number", where=place, found=repr(value.group(1)[:20]),
            expected="a number, with a point for decimals, or nothing", remedy="correct it or drop the row",
        )  # fmt: skip
    return InputError("the file is not CSV in UTF-8", where=place, remedy="export it again")


def write_columns(
    path: str | os.PathLike[str], columns: Mapping[str, Any], *, overwrite: bool = False
) -> None:
    """Write columns; numbers in the shortest form that reads back to the same number, NaN as nothing.

    Parameters
    ----------
    path : path
    columns : mapping of str to array of float64 or sequence of str
        Of one length, in the order in which they shall stand.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    from pyarrow import csv as arrow_csv

    table = _arrow_table(columns)
    plain = not any(_needs_quotes(c) for c in columns.values() if not isinstance(c, np.ndarray))
    head = io.StringIO()
    csv.writer(head, lineterminator="\n").writerow(columns)
    with whole_file(path, overwrite=overwrite) as temporary, temporary.open("wb") as stream:
        stream.write(head.getvalue().encode("utf-8"))
        arrow_csv.write_csv(
            table,
            stream,
            arrow_csv.WriteOptions(include_header=False, quoting_style="none" if plain else "needed"),
        )


def write_parquet_columns(
    path: str | os.PathLike[str],
    columns: Mapping[str, Any],
    told: Mapping[str, Mapping[str, str]],
    *,
    overwrite: bool = False,
) -> None:
    """Write columns as Parquet; NaN as a missing value.

    Parameters
    ----------
    path, columns
        As in `write_columns`.
    told : mapping of str to mapping of str to str
        What the metadata say of a column (its unit).

    Raises
    ------
    InputError
        As `write_columns`.
    """
    import pyarrow
    from pyarrow import parquet

    table = _arrow_table(columns)
    fields = [pyarrow.field(f.name, f.type, metadata=dict(told.get(f.name, {}))) for f in table.schema]
    schema = pyarrow.schema(fields, metadata={"notice": caution()})
    with whole_file(path, overwrite=overwrite) as temporary:
        parquet.write_table(table.cast(schema), temporary, compression="zstd")


def _arrow_table(columns: Mapping[str, Any]) -> Any:
    import pyarrow

    arrays = [
        pyarrow.array(c + 0.0, from_pandas=True)
        if isinstance(c, np.ndarray)
        else pyarrow.array(list(c), pyarrow.string())
        for c in columns.values()
    ]
    return pyarrow.table(arrays, names=list(columns))


def _needs_quotes(texts: Sequence[str]) -> bool:
    return any(mark in text for text in texts for mark in ',"\n\r')
