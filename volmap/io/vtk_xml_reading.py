"""Read the arrays of a VTK XML file without VTK.

VTK's own readers ask for memory a damaged file names and end the program when they do not get it; a
reader for files a user hands over must not.  Layout: VTK XML formats (VTK user's guide, "VTK file
formats"): inline or appended, text, base64 or raw, packed with zlib or not, one piece.
"""

from __future__ import annotations

import base64
import binascii
import os
import re
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any
from xml.etree import ElementTree

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import all_bytes, shown_name
from volmap.types.errors import InputError

_TYPES = {"Int8": "i1", "UInt8": "u1", "Int16": "i2", "UInt16": "u2", "Int32": "i4", "UInt32": "u4",
          "Int64": "i8", "UInt64": "u8", "Float32": "f4", "Float64": "f8", "String": "i1"}  # fmt: skip
_APPENDED = re.compile(rb'<AppendedData\s+encoding\s*=\s*"(raw|base64)"\s*>\s*_')
_DEFLATE_AT_BEST = 1032
Section = dict[str, NDArray[Any]]


class _DamageError(Exception):
    """Something in the file does not fit; the sentence says what."""


@dataclass(frozen=True)
class VtkPiece:
    """The only piece of a VTK XML file.

    Parameters
    ----------
    counts : mapping of str to int
        The piece's own counts ("NumberOfPoints").
    sections : mapping of str to arrays by name
        "PointData", "CellData", "Points", "Cells", "Polys"; arrays of several components are 2-D.
    field_data : mapping of str to str, list of str or array
    """

    counts: Mapping[str, int]
    sections: Mapping[str, Section]
    field_data: Mapping[str, Any]


def read_piece(path: str | os.PathLike[str], kind: str) -> VtkPiece:
    """Read a file of the wanted kind ("UnstructuredGrid", "PolyData").

    Raises
    ------
    InputError
        Another kind of file, damaged, cut short, or with several pieces.
    """
    where = shown_name(path)
    data = all_bytes(path)
    if b"<VTKFile" not in data[:4096]:
        raise InputError("is not a VTK XML file", where=where, expected=f"a VTKFile of type {kind}")
    try:
        return _piece(data, kind, where)
    except _DamageError as fault:
        raise InputError(
            "the VTK XML file is damaged or cut short",
            where=where,
            found=str(fault),
            remedy="write or copy the file again",
        ) from fault
    except MemoryError as fault:
        raise InputError(
            "what is packed in it does not fit into the memory of this machine", where=where,
            remedy="check what wrote it, or write a smaller one",
        ) from fault  # fmt: skip


def _piece(data: bytes, kind: str, where: str) -> VtkPiece:
    root, source = _opened(data)
    if root.get("type") != kind:
        raise InputError(
            "is another kind of VTK file", where=where, found=str(root.get("type")), expected=kind
        )
    body = root.find(kind)
    pieces = [] if body is None else body.findall("Piece")
    if body is None or len(pieces) != 1:
        raise InputError("does not hold one piece", where=where, found=f"{len(pieces)} pieces")
    counts = {k: _count(v) for k, v in pieces[0].attrib.items() if k.startswith("NumberOf")}
    sections = {part.tag: _arrays(part, source) for part in pieces[0]}
    return VtkPiece(counts, sections, _field_data(body, source))


@dataclass(frozen=True)
class _Source:
    """How a file stores its arrays, and its appended part (after the underscore)."""

    header: np.dtype[Any]
    order: str
    packed: bool
    raw: bool
    appended: bytes


def _opened(data: bytes) -> tuple[ElementTree.Element, _Source]:
    found = _APPENDED.search(data)
    text, appended, raw = data, b"", False
    if found:
        raw = found.group(1) == b"raw"
        end = data.rfind(b"</AppendedData>")
        if end < found.end():
            raise _DamageError("no end of the appended data")
        text = data[: found.start()] + data[end + len(b"</AppendedData>") :]
        appended = data[found.end() : end]
    if b"<!" in text.replace(b"<!--", b""):
        raise _DamageError("declarations that no VTK file holds")
    try:
        root = ElementTree.fromstring(text)
    except (ElementTree.ParseError, ValueError, LookupError) as fault:
        raise _DamageError(str(fault)) from fault
    order = ">" if root.get("byte_order") == "BigEndian" else "<"
    header = np.dtype(order + ("u8" if root.get("header_type") == "UInt64" else "u4"))
    packing = root.get("compressor", "")
    if packing not in ("", "vtkZLibDataCompressor"):
        raise _DamageError(f"the packing {packing}, where only zlib can be read")
    return root, _Source(header, order, bool(packing), raw, appended)


def _arrays(section: ElementTree.Element, source: _Source) -> Section:
    found: Section = {}
    for element in section.findall("DataArray"):
        name = element.get("Name", "")
        if name in found:
            raise _DamageError(f"the array {name!r} twice")
        found[name] = _array(element, source)
    return found


def _field_data(body: ElementTree.Element, source: _Source) -> dict[str, Any]:
    section = body.find("FieldData")
    if section is None:
        return {}
    found: dict[str, Any] = dict(_arrays(section, source))
    for element in section.findall("Array"):
        raw = _array(element, source).astype(np.int8).tobytes()
        words = [word.decode("utf-8", "replace") for word in raw.split(b"\0")[:-1]]
        found[element.get("Name", "")] = words[0] if len(words) == 1 else words
    return found


def _array(element: ElementTree.Element, source: _Source) -> NDArray[Any]:
    name, kind = element.get("Name", ""), _TYPES.get(element.get("type", ""))
    if kind is None:
        raise _DamageError(f"the array {name!r} of type {element.get('type')}")
    dtype: np.dtype[Any] = np.dtype(source.order + kind)
    form = element.get("format", "ascii")
    if form == "ascii":
        values = _from_text(element.text or "", dtype)
    elif form == "binary":
        values = _from_bytes(_block((element.text or "").strip().encode(), source, raw=False), dtype)
    elif form == "appended":
        start = _count(element.get("offset", ""))
        values = _from_bytes(_block(memoryview(source.appended)[start:], source, raw=source.raw), dtype)
    else:
        raise _DamageError(f"the format {form!r}")
    return _rows(values, _count(element.get("NumberOfComponents", "1")), name)


def _rows(values: NDArray[Any], components: int, name: str) -> NDArray[Any]:
    values = values.astype(values.dtype.newbyteorder("="))
    if components < 1 or len(values) % components:
        raise _DamageError(f"{len(values)} values in {name!r}, {components} a row")
    return values if components == 1 else values.reshape(-1, components)


def _from_text(text: str, dtype: np.dtype[Any]) -> NDArray[Any]:
    try:
        return np.array(text.split(), dtype)
    except (ValueError, OverflowError) as fault:
        raise _DamageError("text where numbers should be") from fault


def _from_bytes(data: bytes | memoryview, dtype: np.dtype[Any]) -> NDArray[Any]:
    if len(data) % dtype.itemsize:
        raise _DamageError("part of a number")
    return np.frombuffer(data, dtype)


def _block(data: bytes | memoryview, source: _Source, *, raw: bool) -> bytes | memoryview:
    """The bytes of one array from the data that begin with its header."""
    words = 3 if source.packed else 1
    head = _header(data, words, source, raw)
    if source.packed and head[0]:
        words += head[0]
        head = _header(data, words, source, raw)
    length = words * source.header.itemsize
    if not source.packed:
        if not raw and bytes(data[: _coded(length)])[-1:] != b"=":  # one code for header and values
            return _taken(data, 0, length + head[0], raw)[length:]
        return _taken(data, length if raw else _coded(length), head[0], raw)
    return _unpacked(_taken(data, length if raw else _coded(length), sum(head[3:]), raw), head)


def _header(data: bytes | memoryview, words: int, source: _Source, raw: bool) -> list[int]:
    taken = _taken(data, 0, words * source.header.itemsize, raw)
    return [int(v) for v in np.frombuffer(taken, source.header)]


def _coded(n: int) -> int:
    """Characters of base64 for n bytes."""
    return 4 * ((n + 2) // 3)


def _taken(data: bytes | memoryview, start: int, n: int, raw: bool) -> bytes:
    """n bytes from `start` on (counted in stored characters)."""
    stop = start + (n if raw else _coded(n))
    if stop > len(data):
        raise _DamageError("data that end early")
    part = bytes(data[start:stop])
    try:
        part = part if raw else base64.b64decode(part, validate=True)
    except (binascii.Error, ValueError):
        raise _DamageError("data that are not base64") from None
    if len(part) < n:
        raise _DamageError("data that end early")
    return part[:n]


def _unpacked(data: bytes, head: list[int]) -> bytes | memoryview:
    """Undo the packing block by block; head = [blocks, size, size of the last or 0, packed sizes...]."""
    sizes = [head[2] if i == head[0] - 1 and head[2] else head[1] for i in range(head[0])]
    if any(size > packed * _DEFLATE_AT_BEST for size, packed in zip(sizes, head[3:], strict=True)):
        raise _DamageError("a packed block that cannot hold what it claims")
    whole, start, at = np.empty(sum(sizes), np.uint8).data, 0, 0  # the memory for all, before any work
    for size, packed in zip(sizes, head[3:], strict=True):
        unpacker = zlib.decompressobj()
        try:
            part = unpacker.decompress(data[start : start + packed], size + 1)
        except zlib.error as fault:
            raise _DamageError("packed data that do not unpack") from fault
        if len(part) != size or not unpacker.eof:
            raise _DamageError("a packed block of the wrong length")
        whole[at : at + size] = part
        start, at = start + packed, at + size
    return whole


def _count(text: str) -> int:
    text = text.strip()
    if not (text.isascii() and text.isdigit() and len(text) < 19):
        raise _DamageError(f"{text[:20]!r} where a count should be")
    return int(text)
