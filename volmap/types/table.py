"""A tidy table: one row a thing, one column a measure, the unit in the column's header."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError


@dataclass(frozen=True, eq=False)
class Column:
    """One column.

    Parameters
    ----------
    name : str
        In small letters, words joined by underscores ("volume_source").
    values : (n,) float64, int64, bool or tuple of str
        NaN and "" stand for what is not there.
    unit : str
        "mm", "mm3", "percent", "1" for a ratio; "" for a number that counts or names, and for words.
    meaning : str
        What it holds, in one sentence.
    """

    name: str
    values: NDArray[Any] | tuple[str, ...]
    unit: str = ""
    meaning: str = ""

    @property
    def header(self) -> str:
        """Name and unit, "volume_source_mm3"."""
        return f"{self.name}_{self.unit}" if self.unit else self.name


@dataclass(frozen=True, eq=False)
class Table:
    """Columns of equal length.

    Parameters
    ----------
    columns : tuple of Column
    about : mapping of str to JSON value
        What the table is, through which map, and what was left out.
    """

    columns: tuple[Column, ...]
    about: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        headers = [column.header for column in self.columns]
        if len(set(headers)) != len(headers) or len({len(c.values) for c in self.columns}) > 1:
            raise InputError("a table needs columns of one length, each with a header of its own")
        for column in self.columns:
            if isinstance(column.values, np.ndarray):
                column.values.setflags(write=False)

    def __len__(self) -> int:
        """Number of rows."""
        return len(self.columns[0].values) if self.columns else 0

    def __getitem__(self, header: str) -> NDArray[Any] | tuple[str, ...]:
        """The values under a header.

        Raises
        ------
        KeyError
        """
        for column in self.columns:
            if column.header == header:
                return column.values
        raise KeyError(header)
