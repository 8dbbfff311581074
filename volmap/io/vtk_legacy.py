"""Read legacy VTK files (.vtk): PolyData and unstructured grids, text or binary, versions 1 to 5.1.

Layout: "VTK file formats", simple legacy formats (VTK user's guide; version 5.1 keeps cells as offsets and
connectivity).  What is read has the form of `vtk_xml_reading`, so that both formats go the same ways from
there.  Binary numbers are big-endian.  No count of the file is believed before the bytes for it are there.
"""

from __future__ import annotations

import os
import re
import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import all_bytes, shown_name
from volmap.io.vtk_xml_reading import Section, VtkPiece
from volmap.types.errors import InputError

_TYPES = {
    "unsigned_char": "u1", "char": "i1", "unsigned_short": "u2", "short": "i2", "unsigned_int": "u4",
    "int": "i4", "unsigned_long": "u8", "long": "i8", "float": "f4", "double": "f8", "vtkidtype": "i4",
    "vtktypeint64": "i8", "vtktypeuint64": "u8", "vtktypeint32": "i4", "vtktypeuint32": "u4",
}  # fmt: skip
_KINDS = {"POLYDATA": "PolyData", "UNSTRUCTURED_GRID": "UnstructuredGrid"}
_CELLS = {
    "VERTICES": "Verts",
    "LINES": "Lines",
    "POLYGONS": "Polys",
    "TRIANGLE_STRIPS": "Strips",
    "CELLS": "Cells",
}
_ROWS = {"VECTORS": 3, "NORMALS": 3, "TENSORS": 9, "TENSORS6": 6}
_WORDS = re.compile(rb"^[ \t]*(?![-+]?(?:nan|inf))[A-Za-z_]", re.MULTILINE | re.IGNORECASE)
_LONGEST_LINE = 4096


class _DamageError(Exception):
    """Something in the file does not fit; the sentence says what."""


def read_legacy(path: str | os.PathLike[str]) -> tuple[str, VtkPiece]:
    """Read a file.

    Returns
    -------
    kind : str
        "PolyData" or "UnstructuredGrid".
    piece : VtkPiece

    Raises
    ------
    InputError
        No such file, another kind of data, damaged or cut short.
    """
    where = shown_name(path)
    data = all_bytes(path)
    if not data.startswith(b"# vtk DataFile Version"):
        raise InputError(
            "is not a legacy VTK file", where=where, expected="a first line that says vtk DataFile Version"
        )
    try:
        return _Parser(data).parsed(where)
    except (_DamageError, UnicodeDecodeError) as fault:
        found = (
            str(fault) if isinstance(fault, _DamageError) else "letters beyond ASCII where words should be"
        )
        raise InputError(
            "the VTK file is damaged or cut short", where=where, found=found,
            remedy="write or copy the file again",
        ) from fault  # fmt: skip


class _Parser:
    """Walks through the file section by section."""

    def __init__(self, data: bytes) -> None:
        self._data, self._at = data, 0
        self._points: NDArray[Any] | None = None
        self._counts: dict[str, int] = {}
        self._sections: dict[str, Section] = {"PointData": {}, "CellData": {}}
        self._rows, self._attributes = 0, self._sections["PointData"]

    def parsed(self, where: str) -> tuple[str, VtkPiece]:
        self._line(), self._line()  # version, title
        coding = self._words()
        if coding not in (["ASCII"], ["BINARY"]):
            raise _DamageError(f"{' '.join(coding)[:20]!r} where ASCII or BINARY should be")
        self._binary = coding == ["BINARY"]
        named = self._words()
        kind = _KINDS.get(named[1].upper(), "") if len(named) == 2 and named[0].upper() == "DATASET" else ""
        if not kind:
            raise InputError(
                "is another kind of VTK file", where=where, found=" ".join(named)[:60],
                expected="a DATASET of POLYDATA or UNSTRUCTURED_GRID",
            )  # fmt: skip
        while self._skip_blank():
            self._section(self._words())
        if self._points is None:
            raise _DamageError("no points")
        return kind, VtkPiece(self._counts, self._sections, {})

    def _section(self, words: list[str]) -> None:
        keyword = words[0].upper()
        if keyword == "POINTS":
            n = self._count(words, 1)
            self._points = self._numbers(3 * n, self._word(words, 2)).reshape(-1, 3)
            self._sections["Points"] = {"Points": self._points}
            self._counts["NumberOfPoints"] = n
        elif keyword in _CELLS:
            self._cells(_CELLS[keyword], self._count(words, 1), self._count(words, 2))
        elif keyword == "CELL_TYPES":
            types = self._numbers(self._count(words, 1), "int")
            self._sections.setdefault("Cells", {})["types"] = types
        elif keyword in ("POINT_DATA", "CELL_DATA"):
            self._rows = self._count(words, 1)
            self._attributes = self._sections["PointData" if keyword == "POINT_DATA" else "CellData"]
        elif keyword == "METADATA":
            self._pass_over_metadata()
        elif keyword == "FIELD":
            self._field(self._count(words, 2))
        else:
            self._attribute(keyword, words)

    def _attribute(self, keyword: str, words: list[str]) -> None:
        if keyword in _ROWS:
            self._keep(self._word(words, 1), self._numbers(_ROWS[keyword] * self._rows, self._word(words, 2)),
                       _ROWS[keyword])  # fmt: skip
        elif keyword == "SCALARS":
            n = self._count(words, 3) if len(words) > 3 else 1
            self._skip_blank()
            if self._words()[:1] != ["LOOKUP_TABLE"]:
                raise _DamageError("scalars without a line LOOKUP_TABLE")
            self._keep(self._word(words, 1), self._numbers(n * self._rows, self._word(words, 2)), n)
        elif keyword == "COLOR_SCALARS":
            n = self._count(words, 2)
            self._numbers(n * self._rows, "unsigned_char" if self._binary else "float")
        elif keyword == "LOOKUP_TABLE":
            self._numbers(4 * self._count(words, 2), "unsigned_char" if self._binary else "float")
        elif keyword == "TEXTURE_COORDINATES":
            n = self._count(words, 2)
            self._keep(self._word(words, 1), self._numbers(n * self._rows, self._word(words, 3)), n)
        else:
            named = words[0][:20] if words[0].isascii() and words[0].isprintable() else "no word"
            raise _DamageError(f"{named!r} where a section should begin")

    def _keep(self, name: str, values: NDArray[Any], components: int) -> None:
        self._attributes[name] = values if components == 1 else values.reshape(-1, components)

    def _field(self, n_arrays: int) -> None:
        for _ in range(n_arrays):
            if not self._skip_blank():
                raise _DamageError("data that end early")
            words = self._words()
            if words[:1] == ["METADATA"]:
                self._pass_over_metadata()
                self._skip_blank()
                words = self._words()
            components, n = self._count(words, 1), self._count(words, 2)
            kind = self._word(words, 3).lower()
            if kind == "string":
                self._pass_over_strings(components * n)
                continue
            values = self._numbers(components * n, kind)
            if (
                self._rows and n == self._rows
            ):  # before any POINT_DATA or CELL_DATA it speaks of the whole file
                self._keep(self._word(words, 0), values, components)

    def _cells(self, section: str, n: int, size: int) -> None:
        """Cells as corners after their number (to version 4.2), or as offsets and connectivity (5.1)."""
        if self._data[self._at : self._at + 9].lstrip().startswith(b"OFFSETS"):
            self._skip_blank()
            ends = self._numbers(n, self._word(self._words(), 1))
            self._skip_blank()
            named = self._words()
            if named[:1] != ["CONNECTIVITY"]:
                raise _DamageError("offsets without connectivity")
            flat = self._numbers(size, self._word(named, 1))
            n, ends = max(n - 1, 0), ends[1:]
        else:
            flat, ends = _apart(self._numbers(size, "int"), n)
        self._counts[f"NumberOf{section}"] = n
        self._sections.setdefault(section, {}).update({"connectivity": flat, "offsets": ends})

    def _numbers(self, n: int, kind: str) -> NDArray[Any]:
        code = _TYPES.get(kind.lower())
        if code is None:
            raise _DamageError(f"numbers of the type {kind[:20]!r}")
        dtype = np.dtype(code)
        if self._binary:
            stop = self._at + n * dtype.itemsize
            if stop > len(self._data):
                raise _DamageError("data that end early")
            values = np.frombuffer(self._data, dtype.newbyteorder(">"), n, self._at).astype(dtype)
            self._at = stop
            return values
        return self._numbers_in_text(n, dtype)

    def _numbers_in_text(self, n: int, dtype: np.dtype[Any]) -> NDArray[Any]:
        after = _WORDS.search(self._data, self._at)
        stop = after.start() if after else len(self._data)
        if 2 * n > stop - self._at + 1:
            raise _DamageError("data that end early")
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                text = self._data[self._at : stop].decode("ascii")
                values = np.fromstring(text, np.float64, sep=" ") if n else np.empty(0)
        except (ValueError, DeprecationWarning) as fault:
            raise _DamageError("text where numbers should be") from fault
        if len(values) != n:
            raise _DamageError(f"{len(values)} numbers where {n} should be")
        self._at = stop
        with np.errstate(all="ignore"):
            return values.astype(dtype)

    def _pass_over_metadata(self) -> None:
        while self._at < len(self._data) and self._line().strip():
            pass

    def _pass_over_strings(self, n: int) -> None:
        if n > len(self._data) - self._at:
            raise _DamageError("data that end early")
        for _ in range(n):
            if not self._binary:
                self._line()
                continue
            # the upper two bits of the first byte tell how many bytes hold the length: 8, 4, 2 or 1
            width = 8 >> (self._data[self._at] >> 6) if self._at < len(self._data) else 1
            head = int.from_bytes(self._data[self._at : self._at + width], "big")
            self._at += width + (head & ((1 << (8 * width - 2)) - 1))

    def _skip_blank(self) -> bool:
        """Go to the next character that is none; False at the end of the file."""
        found = re.compile(rb"\S").search(self._data, self._at)
        self._at = found.start() if found else len(self._data)
        return found is not None

    def _line(self) -> str:
        stop = self._data.find(b"\n", self._at)
        stop = len(self._data) if stop < 0 else stop
        if stop - self._at > _LONGEST_LINE:
            raise _DamageError("a line without end")
        text = self._data[self._at : stop].decode("utf-8", "replace")
        self._at = stop + 1
        return text

    def _words(self) -> list[str]:
        words = self._line().split()
        if not words:
            raise _DamageError("an empty line where a section should begin")
        return words

    @staticmethod
    def _word(words: list[str], at: int) -> str:
        if at >= len(words):
            raise _DamageError(f"a short line {' '.join(words)[:40]!r}")
        return words[at]

    def _count(self, words: list[str], at: int) -> int:
        text = self._word(words, at)
        if not (text.isascii() and text.isdigit() and len(text) < 16):
            raise _DamageError(f"{text[:20]!r} where a count should be")
        return int(text)


def _apart(flat: NDArray[Any], n: int) -> tuple[NDArray[Any], NDArray[np.int64]]:
    """Corners, and where the corners of each cell end, from "number, corners" after each other."""
    if n and len(flat) % n == 0 and (flat[:: len(flat) // n] == len(flat) // n - 1).all():
        rows = flat.reshape(n, -1)[:, 1:]  # all of a kind
        return rows.ravel(), np.arange(1, n + 1, dtype=np.int64) * rows.shape[1]
    starts, at, counts = [], 0, flat.tolist()
    while at < len(counts):
        if not 0 < counts[at] < len(counts) - at:
            raise _DamageError("a cell that does not end")
        starts.append(at)
        at += counts[at] + 1
    if len(starts) != n:
        raise _DamageError(f"{len(starts)} cells where {n} should be")
    return np.delete(flat, starts), np.cumsum(flat[starts], dtype=np.int64)
