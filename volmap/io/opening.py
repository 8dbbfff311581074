"""Open a file a user named, or say in one sentence why not."""

from __future__ import annotations

import os
import stat
from pathlib import Path

from volmap.types.errors import InputError


def shown_name(path: str | os.PathLike[str]) -> str:
    """The file's name without its folders, printable anywhere."""
    name = Path(path).name or str(path)
    return name.encode("utf-8", "replace").decode("utf-8")


def existing_file(path: str | os.PathLike[str]) -> Path:
    """The path of a regular file that exists and is not empty.

    Raises
    ------
    InputError
        Missing, a folder, not a regular file, empty, or in a folder that may not be entered.
    """
    where = shown_name(path)
    try:
        status = os.stat(path)
    except (OSError, ValueError) as fault:
        raise cannot_open(path, fault) from fault
    if stat.S_ISDIR(status.st_mode):
        raise InputError(
            "is a folder", where=where, expected="a file", remedy="name one file inside the folder"
        )
    if not stat.S_ISREG(status.st_mode):
        raise InputError("is not a regular file", where=where, remedy="copy the data into a file first")
    if status.st_size == 0:
        raise InputError("the file is empty", where=where, found="0 bytes", remedy="copy or export it again")
    return Path(path)


def cannot_open(path: str | os.PathLike[str], fault: Exception) -> InputError:
    """The sentence for an operating-system fault."""
    where = shown_name(path)
    if isinstance(fault, FileNotFoundError | NotADirectoryError):
        return InputError("there is no such file", where=where, remedy="check the name and the folder")
    if isinstance(fault, PermissionError):
        return InputError(
            "the file may not be read", where=where, remedy="ask its owner for permission to read it"
        )
    reason = fault.strerror if isinstance(fault, OSError) and fault.strerror else "an impossible file name"
    return InputError("the file cannot be opened", where=where, found=reason.lower())


def all_bytes(path: str | os.PathLike[str], *, limit: int = 2**31) -> bytes:
    """The content of a file.

    Raises
    ------
    InputError
        As `existing_file`, or larger than `limit` bytes.
    """
    file = existing_file(path)
    if file.stat().st_size > limit:
        raise InputError(
            "the file is too large for what it should be",
            where=shown_name(path),
            found=f"{file.stat().st_size} bytes",
            expected=f"at most {limit}",
        )
    try:
        return file.read_bytes()
    except OSError as fault:
        raise cannot_open(path, fault) from fault


def all_text(path: str | os.PathLike[str], *, limit: int = 2**28) -> str:
    """The content of a UTF-8 text file, its byte order mark (if any) removed.

    Raises
    ------
    InputError
        As `all_bytes`, or not UTF-8.
    """
    try:
        return all_bytes(path, limit=limit).decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        raise InputError(
            "the file is not UTF-8 text",
            where=shown_name(path),
            found=f"a byte that does not fit at position {fault.start}",
            remedy="save it again as UTF-8",
        ) from fault
