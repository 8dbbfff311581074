"""Measurement tables: CSV in UTF-8, places in world millimetres RAS+, units in the headings.

``name,x_mm,y_mm,z_mm`` and then, in any order,

* a scalar: ``<quantity>_<unit>`` (``t1_ms``, ``activity_kBq_per_ml``, ``ratio_1``);
* a vector: the three columns ``<quantity>_x_<unit>``, ``_y_``, ``_z_`` (``flow_x_mm_per_s`` ...);
* a symmetric tensor: the six columns ``<quantity>_xx_<unit>``, ``_xy_``, ``_xz_``, ``_yy_``, ``_yz_``
  and ``_zz_``;
* a text: a heading without an underscore (``site``), kept letter for letter.

Components are along x, y, z of the world.  An empty cell is a missing value.
"""

from __future__ import annotations

import os
import re
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.csv_columns import read_columns, read_header, write_columns, write_parquet_columns
from volmap.io.opening import shown_name
from volmap.types.errors import InputError
from volmap.types.measurements import Measurements
from volmap.types.quantities import KINDS, Quantity, Rules

PLACE = ("name", "x_mm", "y_mm", "z_mm")
COMPONENTS = ((), ("x", "y", "z"), ("xx", "xy", "xz", "yy", "yz", "zz"))
_TENSOR_AT = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))
_SCALAR = re.compile(r"(.+?)_([^_]+(?:_per_[^_]+)*)")


@dataclass(frozen=True)
class QuantityColumns:
    """The columns of one quantity.

    Parameters
    ----------
    name, unit : str
    rank : int
        0 scalar, 1 vector, 2 symmetric tensor.
    headings : tuple of str
        Of its 1, 3 or 6 columns, in the order of `COMPONENTS`.
    """

    name: str
    unit: str
    rank: int
    headings: tuple[str, ...]


def read_measurements(path: str | os.PathLike[str], rules: Rules) -> Measurements:
    """Places and what was measured there.

    Parameters
    ----------
    path : path
    rules : Rules
        How each quantity changes when it is carried, or that it stays behind.

    Raises
    ------
    UnsaidError
        A quantity without a rule, or a rule for one that is not there.
    InputError
        A header that is not that of such a table, a component that is missing, a value that is no number,
        a place without coordinates, no row.
    """
    where = shown_name(path)
    groups, texts = quantity_columns(read_header(path), where)
    rules.require_known((g.name for g in groups), where)
    groups = tuple(g for g in groups if g.name not in rules.left_out)
    said = [rules.required(g.name, g.rank, where) for g in groups]
    columns = read_columns(path, ("name", *texts))
    points = np.stack([columns.numbers[c] for c in PLACE[1:]], axis=1)
    _require_places(points, where)
    try:
        return Measurements(
            columns.texts["name"],
            points,
            tuple(
                Quantity(g.name, g.unit, _values(g, columns.numbers), rule)
                for g, rule in zip(groups, said, strict=True)
            ),
            {t: columns.texts[t] for t in texts},
        )
    except InputError as fault:
        raise fault.at(f"{where}, {fault.where}") from fault


def write_measurements(
    path: str | os.PathLike[str], measured: Measurements, *, overwrite: bool = False
) -> None:
    """Write places and quantities as CSV, or as Parquet for statistics when the name ends in .parquet.

    In CSV numbers have the shortest form that reads back to the same number.  Parquet keeps unit and rule of
    each column and the caution in its metadata.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    columns: dict[str, Any] = {"name": measured.names}
    columns |= {c: measured.points[:, i] for i, c in enumerate(PLACE[1:])}
    told = {c: {"unit": "mm", "frame": "RAS+"} for c in PLACE[1:]}
    for quantity in measured.quantities:
        names = headings(quantity.name, quantity.unit, quantity.rank)
        columns |= dict(zip(names, _components(quantity.values), strict=True))
        told |= {key: {"unit": quantity.unit, "rule": quantity.rule.value} for key in names}
    columns |= dict(measured.texts)
    if os.fspath(path).lower().endswith(".parquet"):
        write_parquet_columns(path, columns, told, overwrite=overwrite)
    else:
        write_columns(path, columns, overwrite=overwrite)


def headings(name: str, unit: str, rank: int) -> tuple[str, ...]:
    """Headings of the columns of a quantity."""
    return tuple(f"{name}_{c}_{unit}" for c in COMPONENTS[rank]) or (f"{name}_{unit}",)


def quantity_columns(
    header: tuple[str, ...], where: str
) -> tuple[tuple[QuantityColumns, ...], tuple[str, ...]]:
    """The quantities a header names, and the headings of its texts.

    Raises
    ------
    InputError
        No places at its beginning, a component without its partners, pairs of points.
    """
    if header[:4] != PLACE:
        raise InputError(
            "the header is not that of a table of places", where=where, found=",".join(header)[:80],
            expected=",".join(PLACE) + ",<quantity>_<unit>,...",
            remedy="coordinates are world millimetres, RAS+, separated by commas",
        )  # fmt: skip
    if "to_x_mm" in header:
        raise InputError(
            "holds pairs of points of two scans", where=where, expected="places of one scan",
            remedy="leave out the columns to_x_mm, to_y_mm and to_z_mm",
        )  # fmt: skip
    if "" in header:
        raise InputError("a column has no heading", where=f"{where}, line 1")
    groups: dict[str, QuantityColumns] = {}
    for column in header[4:]:
        if "_" in column:
            group = _group_of(column)
            _require_whole(group, header, column, where)
            other = groups.setdefault(group.name, group)
            if other != group:
                raise InputError(
                    f"the quantity {group.name} stands twice", where=f"{where}, line 1", found=column[:40]
                )
    return tuple(groups.values()), tuple(c for c in header[4:] if "_" not in c)


def _group_of(column: str) -> QuantityColumns:
    """The quantity a column belongs to, told by a component's word between name and unit."""
    words = column.split("_")
    for at in range(len(words) - 2, 0, -1):
        for rank in (1, 2):
            if words[at] in COMPONENTS[rank]:
                name, unit = "_".join(words[:at]), "_".join(words[at + 1 :])
                return QuantityColumns(name, unit, rank, headings(name, unit, rank))
    found = _SCALAR.fullmatch(column)
    name, unit = found.groups() if found else (column, "")
    return QuantityColumns(name, unit, 0, (column,))


def _require_whole(group: QuantityColumns, header: tuple[str, ...], column: str, where: str) -> None:
    missing = [h for h in group.headings if h not in header]
    if not group.name or not group.unit:
        raise InputError(
            "a heading names no quantity with its unit", where=f"{where}, line 1", found=column[:40],
            expected="<quantity>_<unit>", remedy="write _1 for a number without unit",
        )  # fmt: skip
    if missing:
        raise InputError(
            f"a {KINDS[group.rank]} lacks a component", where=f"{where}, line 1",
            found=f"{column} alone"[:60], expected=f"{missing[0]} beside it",
            remedy="give all components; a word like _x_ in the heading of a scalar cannot be told from one",
        )  # fmt: skip


def _require_places(points: NDArray[np.float64], where: str) -> None:
    if not len(points):
        raise InputError("the file holds no place", where=where, remedy="add one row a place")
    lost = np.flatnonzero(~np.isfinite(points).all(axis=1))
    if len(lost):
        raise InputError(
            "a place lacks a finite coordinate", where=f"{where}, row {lost[0] + 2}",
            remedy="correct it or drop the row",
        )  # fmt: skip


def _values(group: QuantityColumns, numbers: object) -> NDArray[np.float64]:
    columns = [numbers[h] for h in group.headings]  # type: ignore[index]
    if group.rank < 2:
        return np.stack(columns, axis=1) if group.rank else columns[0]
    tensors = np.empty((len(columns[0]), 3, 3))
    for (i, j), values in zip(_TENSOR_AT, columns, strict=True):
        tensors[:, i, j] = tensors[:, j, i] = values
    return tensors


def _components(values: NDArray[np.float64]) -> list[NDArray[np.float64]]:
    """One column a component."""
    if values.ndim == 1:
        return [values]
    if values.ndim == 2:
        return [values[:, i] for i in range(3)]
    return [values[:, i, j] for i, j in _TENSOR_AT]
