"""Meshes as meshio reads them, with its parsers kept from waiting, printing and ending the program."""

from __future__ import annotations

import contextlib
import importlib
import io
import os
import warnings
from pathlib import Path
from typing import Any

import numpy as np

from volmap.io.opening import shown_name
from volmap.types.errors import InputError

FORMATS = {
    ".stl": "stl", ".ply": "ply", ".off": "off", ".obj": "obj", ".msh": "gmsh", ".mesh": "medit",
    ".wkt": "wkt",
}  # fmt: skip
_PATIENCE = 3


def parsed(file: Path) -> Any:
    """The meshio mesh of a file whose ending is one of `FORMATS`.

    Raises
    ------
    InputError
        The file is damaged.
    """
    kind = FORMATS[file.suffix.lower()]
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
            "the surface file is damaged or not what its name says", where=shown_name(file),
            expected=file.suffix.lower().lstrip(".").upper(), remedy="export it again",
        ) from fault  # fmt: skip


_IN_TEXT, _IN_BYTES = ("off", "obj", "medit"), ("ply",)  # parsers that take an open file
_INNER = {"gmsh": "meshio.gmsh.main"}  # whose `read` opens the file itself


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
