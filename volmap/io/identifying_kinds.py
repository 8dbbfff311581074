"""The table of what may identify somebody: `identifying.toml` in the project's shared folder."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

from volmap.types.findings import Level


@dataclass(frozen=True)
class IdentifyingKind:
    """One kind of identifying fields.

    Parameters
    ----------
    level : Level
    tells : str
        Ends the sentence "holds fields that could tell ...".
    types : frozenset of str
        DICOM value representations (PS3.5 6.2) that are always of this kind.
    fields : frozenset of str
        DICOM keywords (PS3.6).
    """

    level: Level
    tells: str
    types: frozenset[str]
    fields: frozenset[str]


@cache
def identifying_kinds() -> dict[str, IdentifyingKind]:
    """The kinds by name, the gravest first."""
    table = tomllib.loads(files("volmap_shared").joinpath("identifying.toml").read_text(encoding="utf-8"))
    return {
        name: IdentifyingKind(
            Level(row["level"]), row["tells"], frozenset(row["types"]), frozenset(row["fields"])
        )
        for name, row in table.items()
    }


@cache
def kind_by_field() -> dict[str, str]:
    """Kind of each DICOM keyword."""
    return {field: name for name, kind in identifying_kinds().items() for field in kind.fields}


@cache
def kind_by_type() -> dict[str, str]:
    """Kind of each DICOM value representation."""
    return {vr: name for name, kind in identifying_kinds().items() for vr in kind.types}
