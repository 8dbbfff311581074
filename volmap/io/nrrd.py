"""NRRD volumes: labels and intensities, attached (.nrrd) or with their voxels in a second file (.nhdr).

Header fields as in the format's own definition ("Definition of NRRD File Format", the teem library's pages):
axes from fastest to slowest, `space directions` one vector an axis, `space origin` the centre of the first
sample.  pynrrd parses the header; the voxels are read here, because a header may name any file and any size.
Keys with values (`key:=value`) are other programs' and are not read.
"""

from __future__ import annotations

import bz2
import gzip
import math
import os
import warnings
import zlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from volmap.io.nrrd_place import affine_of, frame_axis
from volmap.io.opening import cannot_open, existing_file, shown_name
from volmap.io.reading import AS_IT_IS, Reading
from volmap.io.stacks import Stack, frames_wanted
from volmap.io.voxel_bytes import DEFLATE_AT_BEST, cut_short, read_exactly, require_end, require_room, skip
from volmap.types.errors import InputError

_LONGEST_HEADER, _LONGEST_TEXT = 2**20, 2**28  # bytes
_BZIP2_AT_BEST = 2**20  # 900 kB blocks of runs: 46 MB of zeros in 46 bytes (bzip2 1.0.8, measured)
_RAW, _GZIP, _BZIP2 = ("raw",), ("gzip", "gz"), ("bzip2", "bz2")
_TEXT = ("ascii", "text", "txt")
_NEEDED = ("dimension", "type", "encoding", "sizes")
_TYPES = {
    "signed char": "i1", "int8": "i1", "int8_t": "i1", "uchar": "u1", "unsigned char": "u1", "uint8": "u1",
    "uint8_t": "u1", "short": "i2", "short int": "i2", "signed short": "i2", "signed short int": "i2",
    "int16": "i2", "int16_t": "i2", "ushort": "u2", "unsigned short": "u2", "unsigned short int": "u2",
    "uint16": "u2", "uint16_t": "u2", "int": "i4", "signed int": "i4", "int32": "i4", "int32_t": "i4",
    "uint": "u4", "unsigned int": "u4", "uint32": "u4", "uint32_t": "u4", "longlong": "i8",
    "long long": "i8", "long long int": "i8", "signed long long": "i8", "signed long long int": "i8",
    "int64": "i8", "int64_t": "i8", "ulonglong": "u8", "unsigned long long": "u8",
    "unsigned long long int": "u8", "uint64": "u8", "uint64_t": "u8", "float": "f4", "double": "f8",
}  # fmt: skip
_ENDIAN = {"little": "<", "big": ">"}


def is_nrrd(path: str | os.PathLike[str]) -> bool:
    """True when a file begins as NRRD files do."""
    try:
        with Path(path).open("rb") as file:
            return file.read(4) == b"NRRD"
    except (OSError, ValueError):
        return False


def read_stack(path: str | os.PathLike[str], reading: Reading = AS_IT_IS) -> Stack:
    """The numbers of a file, one frame of them or (with a threshold and no frame) all.

    Raises
    ------
    InputError
        Not NRRD, a part of the header nonsense or missing, a space or unit that cannot be used, voxels that
        are not there, data outside the header's own folder, several frames and none chosen.
    """
    file, where = existing_file(path), shown_name(path)
    with _opened(file, where) as stream:
        header = _parsed(_header_lines(stream, where), where)
        attached = stream.tell()
    sizes, dtype = _sizes(header, where), _dtype(header, where)
    list_axis = frame_axis(header, sizes, where)
    affine, findings = affine_of(header, sizes, list_axis, where)
    n_frames = 1 if list_axis is None else sizes[list_axis]
    frames, said = frames_wanted(n_frames, reading, where)
    data_file, start = _data_file(header, file, where), 0
    if data_file is None:
        data_file, start = file, attached
    with _opened(data_file, where) as stream:
        stream.seek(start)
        stored = _voxels(stream, header, sizes, dtype, where)
    if list_axis is None:
        return Stack(where, stored[..., np.newaxis], affine, (*findings, *said))
    values = np.moveaxis(stored, list_axis, -1)[..., frames.start : frames.stop]
    return Stack(where, values, affine, (*findings, *said))


@contextmanager
def _opened(file: Path, where: str) -> Iterator[BinaryIO]:
    try:
        with file.open("rb") as stream:
            yield stream
    except EOFError as fault:
        raise cut_short(where, "packed data that end early") from fault
    except (gzip.BadGzipFile, zlib.error) as fault:
        raise _damaged_packing(where) from fault
    except OSError as fault:
        if fault.errno is None:  # bz2 says no more than that
            raise _damaged_packing(where) from fault
        raise cannot_open(file, fault) from fault


def _damaged_packing(where: str) -> InputError:
    return InputError("the packed data are damaged", where=where, remedy="copy or export the file again")


def _header_lines(stream: BinaryIO, where: str) -> list[bytes]:
    """The lines up to the empty one, without keys, values and comments."""
    lines: list[bytes] = []
    while stream.tell() < _LONGEST_HEADER:
        line = stream.readline(_LONGEST_HEADER)
        if not lines and not line.startswith(b"NRRD000"):
            raise InputError(
                "is not an NRRD file", where=where, found=f"a file that begins with {line[:4]!r}",
                expected="NRRD0001 to NRRD0005",
            )  # fmt: skip
        if not line.strip():
            return lines
        value_at, field_at = line.find(b":="), line.find(b": ")
        is_key = value_at >= 0 and not 0 <= field_at < value_at
        if not is_key and not line.startswith(b"#"):
            lines.append(line)
    raise InputError(
        "the header has no end", where=where, expected=f"an empty line within {_LONGEST_HEADER} bytes"
    )


def _parsed(lines: list[bytes], where: str) -> Mapping[str, Any]:
    import nrrd

    try:
        with warnings.catch_warnings(), np.errstate(all="ignore"):
            warnings.simplefilter("ignore")
            header: Mapping[str, Any] = nrrd.read_header(lines)
    except Exception as fault:  # a foreign parser meets a broken header in any way at all
        found = " ".join(str(fault).split())[:100] if isinstance(fault, nrrd.NRRDError) else ""
        raise InputError(
            "the NRRD header is damaged", where=where, found=found, remedy="export the file again"
        ) from fault
    missing = [field for field in _NEEDED if field not in header]
    if missing:
        raise InputError("the NRRD header lacks a field", where=where, found=f"no {missing[0]}")
    return header


def _sizes(header: Mapping[str, Any], where: str) -> tuple[int, ...]:
    sizes = tuple(int(n) for n in header["sizes"])
    if len(sizes) != header["dimension"] or not sizes or min(sizes) < 1 or max(sizes) > 2**31:
        raise InputError(
            "the header's dimensions are nonsense", where=where,
            found=f"dimension {header['dimension']}, sizes {list(sizes)[:8]}", remedy="export the file again",
        )  # fmt: skip
    if not 3 <= len(sizes) <= 4:
        raise InputError(
            "the volume has too few dimensions" if len(sizes) < 3 else "the volume has too many dimensions",
            where=where, found=str(len(sizes)), expected="3, or 4 with a list of frames", refused=True,
            remedy="give the whole stack of slices as one volume",
        )  # fmt: skip
    return sizes


def _dtype(header: Mapping[str, Any], where: str) -> np.dtype[Any]:
    kind = _TYPES.get(str(header["type"]))
    if kind is None:
        raise InputError(
            "the voxels are of a type that cannot be used", where=where, found=str(header["type"])[:40],
            expected="one whole or real number a voxel", remedy="export one plain number a voxel",
            refused=header["type"] == "block",
        )  # fmt: skip
    dtype: np.dtype[Any] = np.dtype(kind)
    if dtype.itemsize == 1 or _encoding(header) in _TEXT:
        return dtype
    order = _ENDIAN.get(str(header.get("endian", "")).lower())
    if order is None:
        raise InputError(
            "the header does not say the order of bytes", where=where,
            found=str(header.get("endian", "no endian"))[:40], expected="endian: little or big",
        )  # fmt: skip
    return dtype.newbyteorder(order)  # type: ignore[arg-type]


def _encoding(header: Mapping[str, Any]) -> str:
    return str(header["encoding"]).lower()


def _data_file(header: Mapping[str, Any], file: Path, where: str) -> Path | None:
    """The second file, which must lie in the header's own folder; None when the voxels follow the header."""
    named = header.get("data file", header.get("datafile"))
    if named is None:
        return None
    name = str(named).removeprefix("./")
    plain = name == Path(name).name and "\\" not in name and name not in ("", ".", "..")
    if not plain or name.upper().startswith("LIST") or "%" in name:
        raise InputError(
            "its voxels cannot be taken from where it says", where=where, found=repr(name[:60]),
            expected="one file in the same folder, named without a path",
            remedy="put both files into one folder, or write one .nrrd",
        )  # fmt: skip
    beside = file.with_name(name)
    try:
        existing_file(beside)
        inside = beside.resolve().parent == file.parent.resolve()
    except OSError as fault:
        raise cannot_open(beside, fault) from fault
    if not inside:
        raise InputError(
            "its voxels are a link out of its folder", where=where, found=shown_name(beside),
            expected="a file in the same folder", remedy="copy the file itself there",
        )  # fmt: skip
    return beside


def _voxels(
    stream: BinaryIO, header: Mapping[str, Any], sizes: tuple[int, ...], dtype: np.dtype[Any], where: str
) -> NDArray[Any]:
    """The stored numbers in the header's shape, first axis fastest."""
    lines = int(header.get("line skip", header.get("lineskip", 0)))
    n_skip = int(header.get("byte skip", header.get("byteskip", 0)))
    if not (0 <= lines <= 2**16 and -1 <= n_skip < 2**40):
        raise InputError("the header skips nonsense", where=where, found=f"{lines} lines, {n_skip} bytes")
    for _ in range(lines):
        stream.readline(_LONGEST_HEADER)
    start = stream.tell()
    there = stream.seek(0, os.SEEK_END) - start
    stream.seek(start)
    n, encoding = math.prod(sizes), _encoding(header)
    if encoding in _TEXT:
        return _from_text(stream, n, dtype, there, where).reshape(sizes, order="F")
    best = {**dict.fromkeys(_RAW, 1), **dict.fromkeys(_GZIP, DEFLATE_AT_BEST)}
    best |= dict.fromkeys(_BZIP2, _BZIP2_AT_BEST)
    if encoding not in best:
        raise InputError(
            "the voxels are encoded in a way that cannot be read", where=where, found=encoding[:40],
            expected="raw, gzip, bzip2 or text", remedy="write it again with one of these",
        )  # fmt: skip
    require_room(n, dtype, bytes_there=there, best_packing=best[encoding], where=where)
    if n_skip == -1:  # "the voxels are the last bytes", which packed data cannot be asked for
        _require_raw(encoding, where)
        n_skip = there - n * dtype.itemsize
    unpacked = _unpacked(stream, encoding)
    skip(unpacked, n_skip, where)
    data = read_exactly(unpacked, n * dtype.itemsize, where)
    require_end(unpacked, where)
    return data.view(dtype).reshape(sizes, order="F")


def _require_raw(encoding: str, where: str) -> None:
    if encoding not in _RAW:
        raise InputError(
            "the header counts bytes from the end of packed data", where=where, found="byte skip: -1",
            expected="a count from the beginning", remedy="write the file again",
        )  # fmt: skip


def _unpacked(stream: BinaryIO, encoding: str) -> BinaryIO:
    if encoding in _GZIP:
        return gzip.GzipFile(fileobj=stream, mode="rb")  # type: ignore[return-value]
    return bz2.BZ2File(stream, "rb") if encoding in _BZIP2 else stream  # type: ignore[return-value]


def _from_text(stream: BinaryIO, n: int, dtype: np.dtype[Any], there: int, where: str) -> NDArray[Any]:
    require_room(n, np.dtype("u1"), bytes_there=(there + 1) // 2, where=where)
    if there > _LONGEST_TEXT:
        raise InputError(
            "the voxels are too much text", where=where, found=f"{there} bytes",
            expected=f"at most {_LONGEST_TEXT}", remedy="write it again with the encoding gzip",
        )  # fmt: skip
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            values = np.fromstring(stream.read().decode("ascii"), np.float64, sep=" ")
    except (ValueError, DeprecationWarning) as fault:
        raise InputError("text where numbers should be", where=where) from fault
    if len(values) != n:
        raise cut_short(where, f"{len(values)} of {n} numbers")
    with np.errstate(all="ignore"):
        whole = values.astype(dtype)
    if dtype.kind in "iu" and not np.array_equal(whole, values):
        raise InputError("its numbers do not fit their type", where=where, expected=str(header_type(dtype)))
    return whole


def header_type(dtype: np.dtype[Any]) -> str:
    """A type of number in words of this format ("uint8")."""
    return dtype.newbyteorder("=").name
