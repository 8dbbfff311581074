"""Open a DICOM file, or say in one sentence why not."""

from __future__ import annotations

import io
import os
import warnings
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from volmap.io.opening import cannot_open, existing_file, shown_name
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level

PathLike = str | os.PathLike[str]
_DEFLATED = b"1.2.840.10008.1.2.1.99"  # the only transfer syntax that packs the whole data set (PS3.5 A.5)
_LARGEST_UNPACKED = 2**28


def is_dicom(path: PathLike) -> bool:
    """True for a file with DICM at byte 128 (PS3.10 7.1) or named .dcm, and for a folder that holds one."""
    place = Path(path)
    if place.is_dir():
        return any(True for file in sorted(place.iterdir()) if file.is_file() and has_preamble(file))
    return place.suffix.lower() == ".dcm" or (place.is_file() and has_preamble(place))


def has_preamble(file: Path) -> bool:
    """True when the letters DICM stand at byte 128."""
    try:
        with file.open("rb") as stream:
            return stream.read(132)[128:] == b"DICM"
    except OSError:
        return False


def parsed(path: PathLike, *, pixels: bool = True) -> Any:
    """The data set of a file (`pydicom.FileDataset`); values are only decoded when they are asked for.

    Parameters
    ----------
    path : path
    pixels : bool
        False stops before the pixels.

    Raises
    ------
    InputError
        Missing, not DICOM, damaged, or packed data that unpack to too much.
    """
    import pydicom

    file, where = existing_file(path), shown_name(path)
    if not has_preamble(file):
        raise InputError(
            "is not a DICOM file", where=where, found="no DICM at byte 128",
            remedy="export it again as a DICOM file",
        )  # fmt: skip
    try:
        with _Clipped(file) as stream:
            _require_modest(stream, where)
            return pydicom.dcmread(stream, stop_before_pixels=not pixels)
    except InputError:
        raise
    except OSError as fault:
        raise cannot_open(path, fault) from fault
    except Exception as fault:  # a foreign parser meets a broken file in any way at all
        raise InputError(
            "the DICOM file is damaged or cut short", where=where, remedy="copy or export it again"
        ) from fault


@contextmanager
def odd_values(where: str) -> Iterator[list[Finding]]:
    """Turn what pydicom warns of while the block reads into one finding.

    pydicom's own words quote values, which may be a patient's; only how many there were is said.
    """
    findings: list[Finding] = []
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        yield findings
    if heard:
        many = "a value does" if len(heard) == 1 else f"{len(heard)} values do"
        sentence = f"{many} not keep to the rules of DICOM; what is needed here could be read"
        findings.append(Finding(Level.NOTE, "odd_dicom_values", where, sentence))


class _Clipped(io.BufferedReader):
    """A file whose `read` takes no memory for bytes that a damaged length only claims."""

    def __init__(self, file: Path) -> None:
        super().__init__(io.FileIO(file))
        self._size = file.stat().st_size

    def read(self, size: int | None = -1, /) -> bytes:
        left = max(self._size - self.tell(), 0)
        return super().read(left if size is None or size < 0 else min(size, left))


def _require_modest(stream: io.BufferedReader, where: str) -> None:
    """Refuse a packed data set that unpacks to more than a volume needs, before it is unpacked."""
    head = stream.read(2**12)
    stream.seek(0)
    if _DEFLATED not in head:
        return
    stream.seek(144 + int.from_bytes(head[140:144], "little"))  # (0002,0000), the length of group 2
    unpacker, n = zlib.decompressobj(-zlib.MAX_WBITS), 0
    packed = stream.read(2**16)
    while packed and not unpacker.eof and n <= _LARGEST_UNPACKED:
        n += len(unpacker.decompress(packed, 2**24))
        packed = unpacker.unconsumed_tail or stream.read(2**16)
    stream.seek(0)
    if n > _LARGEST_UNPACKED:
        raise InputError(
            "the packed data unpack to too much", where=where, found=f"more than {n - 1} bytes",
            expected=f"at most {_LARGEST_UNPACKED}", remedy="export it without deflating it",
        )  # fmt: skip
