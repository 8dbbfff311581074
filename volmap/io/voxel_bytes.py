"""The bytes of voxels: as many as the header claims and the file can hold, never more memory than that."""

from __future__ import annotations

from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError

LARGEST_VOXELS = 2**31
DEFLATE_AT_BEST = 1032  # zlib cannot pack tighter than about 1032 to 1 (zlib.net, technical details)
_AT_ONCE = 2**24  # bytes


def require_room(
    n_voxels: int,
    dtype: np.dtype[Any],
    *,
    bytes_there: int,
    where: str,
    best_packing: int = 1,
    most: int | None = None,
) -> None:
    """Refuse, before any memory is taken, voxels that a file cannot hold.

    Parameters
    ----------
    n_voxels : int
        As the header claims.
    dtype : dtype
    bytes_there : int
        What the file has for them, packed or not.
    where : str
    best_packing : int
        Bytes that one stored byte can unpack to at most; 1 when nothing is packed.
    most : int, optional
        Voxels that are to be read, when these are not all.

    Raises
    ------
    InputError
        The file is too short, or there are more voxels than can be worked on.
    """
    if bytes_there * best_packing < n_voxels * dtype.itemsize:
        raise cut_short(
            where, f"{bytes_there} bytes, which cannot hold the {n_voxels} voxels the header claims"
        )
    wanted = n_voxels if most is None else most
    if wanted > LARGEST_VOXELS:
        raise InputError(
            "the volume is too large", where=where, found=f"{wanted} voxels",
            expected=f"at most {LARGEST_VOXELS}", remedy="crop it to the organ, or use larger voxels",
            refused=True,
        )  # fmt: skip


def read_exactly(stream: BinaryIO, n: int, where: str) -> NDArray[np.uint8]:
    """The next n bytes of a stream, never more memory than that.

    Raises
    ------
    InputError
        The stream ends before, or the memory is not there.
    """
    try:
        data = np.empty(n, np.uint8)
    except (MemoryError, ValueError) as fault:
        raise InputError(
            "the voxels do not fit into the memory of this machine", where=where,
            found=f"{n / 2**30:.1f} GiB claimed", remedy="crop the volume, or check what wrote its header",
        ) from fault  # fmt: skip
    whole, at = data.data, 0
    while at < n:
        got = stream.readinto(whole[at : at + _AT_ONCE])  # type: ignore[attr-defined]
        if not got:
            raise cut_short(where, f"{at} of {n} bytes of voxels")
        at += got
    return data


def skip(stream: BinaryIO, n: int, where: str) -> None:
    """Pass over n bytes of a stream, packed or not.

    Raises
    ------
    InputError
        The stream ends before.
    """
    while n > 0:
        got = len(stream.read(min(n, 2**20)))
        if not got:
            raise cut_short(where, "no voxels at all")
        n -= got


def require_end(stream: BinaryIO, where: str) -> None:
    """Read to the end, which checks the checksum of packed data; voxels left over would be in wrong places.

    Raises
    ------
    InputError
        There is more than the header speaks of.
    """
    if stream.read(1):
        raise InputError(
            "the file holds more than its header claims", where=where,
            expected="as many voxels as the header's dimensions give", remedy="export the file again",
        )  # fmt: skip


def cut_short(where: str, found: str) -> InputError:
    """The sentence for a file that ends too early."""
    return InputError(
        "the file is cut short", where=where, found=found, remedy="copy or export the file again"
    )
