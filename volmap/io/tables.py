"""Tidy tables as CSV or Parquet, with a JSON beside them that says what they hold.

A CSV has no room for words beside its rows (a comment line would become data in some statistics package), so
they stand in the JSON; a Parquet carries them in its own metadata too.
"""

from __future__ import annotations

import csv
import io
import json
import math
import os
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import numpy as np

from volmap.io.atomic import whole_file
from volmap.io.json_documents import json_text, plain
from volmap.io.opening import shown_name
from volmap.types import Column, InputError, Table
from volmap.types.notice import caution

ENDINGS = (".csv", ".parquet")


def require_table_name(path: str | os.PathLike[str]) -> None:
    """Refuse a name that ends neither in .csv nor in .parquet.

    Raises
    ------
    InputError
    """
    if Path(path).suffix.lower() not in ENDINGS:
        raise InputError(
            "is no name for a table",
            where=shown_name(path),
            expected="a name that ends in .csv or .parquet",
            remedy="change the ending of the name",
        )


def sidecar_place(path: str | os.PathLike[str]) -> Path:
    """Where the words of a file go: its whole name and .json ("x.csv" and "x.nii.gz" do not collide)."""
    return Path(path).with_name(Path(path).name + ".json")


def write_table(path: str | os.PathLike[str], table: Table, *, overwrite: bool = False) -> None:
    """Write a table and the JSON beside it, both or none.

    The same table gives the same bytes.

    Raises
    ------
    InputError
        As `whole_file`, or a name that ends otherwise.
    """
    require_table_name(path)
    about = describe(table)
    with ExitStack() as both:
        place = both.enter_context(whole_file(path, overwrite=overwrite))
        beside = both.enter_context(whole_file(sidecar_place(path), overwrite=overwrite))
        if Path(path).suffix.lower() == ".csv":
            place.write_bytes(_csv_text(table).encode("utf-8"))
        else:
            _write_parquet(place, table, about)
        beside.write_bytes(json_text(about).encode("utf-8"))


def describe(table: Table) -> dict[str, Any]:
    """Caution, what the table says of itself, and each column's header, unit and meaning."""
    columns = [{"header": c.header, "unit": c.unit, "meaning": c.meaning} for c in table.columns]
    return {"notice": caution(), **plain(table.about), "rows": len(table), "columns": columns}


def _csv_text(table: Table) -> str:
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([column.header for column in table.columns])
    writer.writerows(zip(*(_cells(column) for column in table.columns), strict=True))
    return text.getvalue()


def _cells(column: Column) -> list[str]:
    """The shortest text that reads back to the same number; nothing where there is no value."""
    values = column.values
    if not isinstance(values, np.ndarray):
        return list(values)
    if values.dtype.kind == "f":
        return [repr(v) if math.isfinite(v) else "" for v in (values + 0.0).tolist()]
    if values.dtype.kind == "b":
        return ["true" if v else "false" for v in values.tolist()]
    return [str(v) for v in values.tolist()]


def _write_parquet(path: Path, table: Table, about: dict[str, Any]) -> None:
    import pyarrow
    from pyarrow import parquet

    fields, arrays = [], []
    for column in table.columns:
        array = _arrow_array(column)
        told = {"unit": column.unit, "meaning": column.meaning}
        fields.append(pyarrow.field(column.header, array.type, metadata=told))
        arrays.append(array)
    told = {key: value if isinstance(value, str) else json.dumps(value) for key, value in about.items()}
    schema = pyarrow.schema(fields, metadata=told)
    parquet.write_table(pyarrow.Table.from_arrays(arrays, schema=schema), path, compression="zstd")


def _arrow_array(column: Column) -> Any:
    import pyarrow

    values = column.values
    if isinstance(values, np.ndarray):
        missing = ~np.isfinite(values) if values.dtype.kind == "f" else None
        return pyarrow.array(values, mask=missing)
    return pyarrow.array(values, pyarrow.string())
