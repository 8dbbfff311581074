"""Names of what is to be written."""

from __future__ import annotations

from pathlib import Path

from volmap.types import InputError

NIFTI = (".nii", ".nii.gz")


def told_name(thing: Path) -> str:
    """What a thing is called in what is written: a file by its name, a folder (part of a path) not at all."""
    return "DICOM images" if thing.is_dir() else thing.name


def require_name(out: Path, endings: tuple[str, ...]) -> None:
    """Refuse a name for another kind of file before the work, not after it."""
    if not out.name.lower().endswith(endings):
        raise InputError(
            "is no name for what comes out",
            where=out.name,
            expected=f"a name that ends in {' or '.join(endings)}",
            remedy="change the ending of the name",
        )
