"""Write a whole file or folder, or nothing at all."""

from __future__ import annotations

import errno
import os
import secrets
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from volmap.io.opening import shown_name
from volmap.types.errors import InputError

_DISK = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS, errno.EIO, errno.ENAMETOOLONG, errno.ELOOP)


@contextmanager
def whole_file(path: str | os.PathLike[str], *, overwrite: bool = False) -> Iterator[Path]:
    """Give a temporary sibling to write; rename it into place when the block ends well.

    Parameters
    ----------
    path : path
        Where the file shall stand.  The temporary name keeps its suffixes.
    overwrite : bool
        Replace a file that is there (in one step, as far as the system allows).

    Raises
    ------
    InputError
        The place is taken or cannot be written.  After any failure, Ctrl-C included, nothing is left.
    """
    target = Path(path)
    require_place(target, overwrite=overwrite, folder=False)
    temporary = _sibling(target, "".join(target.suffixes[-2:])[-24:])
    try:
        with _disk_faults(target):
            _begin(temporary, target, folder=False)
            yield temporary
            require_place(target, overwrite=overwrite, folder=False)
            os.replace(temporary, target)
    finally:
        temporary.unlink(missing_ok=True)


@contextmanager
def whole_folder(
    path: str | os.PathLike[str], *, overwrite: bool = False, holding: str = ""
) -> Iterator[Path]:
    """Give a temporary sibling folder to fill; rename it into place when the block ends well.

    Parameters
    ----------
    path : path
    overwrite : bool
        Replace a folder that is there.  The old one is moved aside first and comes back if the new one
        cannot be put in place.
    holding : str
        Name of a file the old folder must hold to be replaced, so that a slip of the pen does not
        replace a folder of something else.  An empty folder may always be replaced.

    Raises
    ------
    InputError
        The place is taken or cannot be written.  After any failure, Ctrl-C included, nothing is left.
    """
    target = Path(path)
    require_place(target, overwrite=overwrite, folder=True, holding=holding)
    temporary = _sibling(target, "")
    try:
        with _disk_faults(target):
            _begin(temporary, target, folder=True)
            yield temporary
            require_place(target, overwrite=overwrite, folder=True, holding=holding)
            _put_folder(temporary, target)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _begin(temporary: Path, target: Path, *, folder: bool) -> None:
    """Make the temporary file or folder; whatever keeps it from being made is a fault of the place."""
    try:
        if folder:
            temporary.mkdir()
        else:
            temporary.touch(exist_ok=False)
    except PermissionError:
        raise
    except OSError as fault:
        raise _not_writable(target, fault) from fault


def _put_folder(temporary: Path, target: Path) -> None:
    if not target.exists():
        os.rename(temporary, target)
        return
    aside = _sibling(target, ".old")
    os.rename(target, aside)
    try:
        os.rename(temporary, target)
    except BaseException:
        os.rename(aside, target)
        raise
    shutil.rmtree(aside, ignore_errors=True)


def _sibling(target: Path, suffix: str) -> Path:
    return target.absolute().parent / f".part-{secrets.token_hex(6)}{suffix}"


def require_place(
    path: str | os.PathLike[str], *, overwrite: bool = False, folder: bool, holding: str = ""
) -> None:
    """Refuse a place that is taken or cannot be written: before long work, and again before the renaming.

    Parameters
    ----------
    path : path
    overwrite, holding
        As in `whole_folder`.
    folder : bool
        A folder is going to stand there, else a file.

    Raises
    ------
    InputError
    """
    target, where = Path(path), shown_name(path)
    with _disk_faults(target):
        _require_parent(target, where)
        if not target.exists() and not target.is_symlink():
            return
    if target.is_dir() != folder:
        kinds = ("a folder", "a file") if folder else ("a file", "a folder")
        raise InputError(
            "the place is taken", where=where, found=kinds[1], expected=kinds[0], remedy=_ANOTHER_NAME
        )
    if folder and not any(target.iterdir()):
        return
    if not overwrite:
        raise InputError(
            "exists already", where=where, remedy=f"{_ANOTHER_NAME}, or --overwrite to replace it"
        )
    if folder and holding and not (target / holding).is_file():
        raise InputError(
            "is not a folder of the kind that would replace it and is left alone",
            where=where,
            expected=f"a folder that holds {holding}",
            remedy=_ANOTHER_NAME,
        )


_ANOTHER_NAME = "choose another name"


def _require_parent(target: Path, where: str) -> None:
    parent = target.absolute().parent
    if not parent.is_dir():
        raise InputError(
            "the folder to write in does not exist",
            where=where,
            found=f"no folder {shown_name(parent)}",
            remedy="make the folder first",
        )
    if not os.access(parent, os.W_OK | os.X_OK):
        raise PermissionError(errno.EACCES, "permission denied")


@contextmanager
def _disk_faults(target: Path) -> Iterator[None]:
    try:
        yield
    except PermissionError as fault:
        raise InputError(
            "cannot be written",
            where=shown_name(target),
            found="no permission to write there",
            remedy="choose a folder you may write in",
        ) from fault
    except OSError as fault:
        if fault.errno not in _DISK:
            raise
        raise _not_writable(target, fault) from fault


def _not_writable(target: Path, fault: OSError) -> InputError:
    return InputError(
        "cannot be written",
        where=shown_name(target),
        found=(fault.strerror or "a fault of the disk").lower(),
        remedy="choose another place or name",
    )
