"""The caution sentence, kept in one place: the project's shared folder."""

from __future__ import annotations

from functools import cache
from importlib.resources import files


@cache
def caution() -> str:
    """The whole caution, for every output that has room for it."""
    return files("volmap_shared").joinpath("caution.txt").read_text(encoding="utf-8").strip()


@cache
def short_caution() -> str:
    """The caution in at most 79 bytes, for the NIfTI `descrip` field."""
    return files("volmap_shared").joinpath("caution_short.txt").read_text(encoding="utf-8").strip()
