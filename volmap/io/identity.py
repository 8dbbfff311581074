"""Which fields of a file could tell who somebody is: names of fields by kind, never what stands in them."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

from volmap.io.dicom import identity as dicom_identity
from volmap.io.dicom.opening import is_dicom
from volmap.io.identifying_kinds import identifying_kinds
from volmap.io.nifti_header import files_of
from volmap.io.nrrd import is_nrrd
from volmap.io.opening import shown_name
from volmap.types.findings import Finding
from volmap.types.notice import short_caution

_LONGEST_HEADER = 2**20
_TEXTS = ("data_type", "db_name", "descrip", "aux_file", "intent_name")
_NAME, _COMMENT, _EXTRA = 0x08, 0x10, 0x04  # flags of a gzip header (RFC 1952, 2.3.1)


@dataclass(frozen=True)
class Identifying:
    """Identifying fields of one input.

    Parameters
    ----------
    where : str
        File name.
    fields : mapping of str to tuple of str
        Names of fields by kind; kinds without one are left out.
    """

    where: str
    fields: Mapping[str, tuple[str, ...]]

    @property
    def findings(self) -> tuple[Finding, ...]:
        """One for each kind."""
        return tuple(self._finding(kind, names) for kind, names in self.fields.items())

    def _finding(self, kind: str, names: tuple[str, ...]) -> Finding:
        about = identifying_kinds()[kind]
        sentence = f"holds fields that could tell {about.tells}: {', '.join(names)}"
        kept = "nothing but SegmentLabel" if "SegmentLabel" in names else "nothing"
        remedy = f"{kept} of it goes into what is written here, but the file itself still holds it"
        return Finding(about.level, f"identifying_{kind}", self.where, sentence, remedy)


def identifying_fields(path: Path) -> Identifying:
    """Which fields of a volume's file, or of all DICOM files of a folder, hold what could identify a person.

    Parameters
    ----------
    path : Path
        NIfTI, NRRD or DICOM that could be read.

    Raises
    ------
    InputError
        A DICOM file that cannot be read.
    """
    where = shown_name(path)
    if is_dicom(path):
        found: Mapping[str, set[str]] = dicom_identity.fields_of(path)
    else:
        try:
            found = _of_nrrd(path) if is_nrrd(path) else _of_nifti(path)
        except (OSError, EOFError, zlib.error):  # its reader has said so already, or soon will
            found = {}
    return Identifying(
        where, {kind: tuple(sorted(found[kind])) for kind in identifying_kinds() if found.get(kind)}
    )


def _of_nifti(path: Path) -> dict[str, set[str]]:
    """Texts of the header, its extensions, and what gzip says around it (nifti1.h; RFC 1952)."""
    file = files_of(path)[0]
    with file.open("rb") as raw:
        head = raw.read(10)
        packed = head[:2] == b"\x1f\x8b"
        raw.seek(0)
        found = {"dates": _gzip_dates(head), "words": _gzip_words(head)} if packed else {}
        stream: BinaryIO = gzip.GzipFile(fileobj=raw, mode="rb") if packed else raw  # type: ignore[assignment]
        words, private = _header_texts(stream)
    found["words"] = found.get("words", set()) | words
    return found | {"private": private}


def _gzip_dates(head: bytes) -> set[str]:
    return {"gzip's time of packing"} if any(head[4:8]) else set()


def _gzip_words(head: bytes) -> set[str]:
    flags = head[3] if len(head) > 3 else 0
    names = {"gzip's file name": _NAME, "gzip's comment": _COMMENT, "gzip's extra field": _EXTRA}
    return {name for name, flag in names.items() if flags & flag}


def _header_texts(stream: BinaryIO) -> tuple[set[str], set[str]]:
    """Names of texts that are not empty, and of extensions."""
    import nibabel as nib

    first = stream.read(4)
    order = "<" if int.from_bytes(first, "little") in (348, 540) else ">"
    length = int.from_bytes(first, "little" if order == "<" else "big")
    kind: Any = {348: nib.Nifti1Header, 540: nib.Nifti2Header}.get(length)
    block = first + stream.read(max(length, 4) - 4) if kind is not None else b""
    if kind is None or len(block) < length:
        return set(), set()
    header = kind(block, endianness=order, check=False).structarr
    texts = {
        name
        for name in _TEXTS
        if name in header.dtype.names and header[name].tobytes().strip(b" \0") not in (b"", _OURS)
    }
    offset = float(header["vox_offset"])
    end = int(offset) if length <= offset < length + _LONGEST_HEADER else length + 4
    return texts, set(_extensions(stream, end - length, "little" if order == "<" else "big"))


_OURS = short_caution().encode()[:80]


def _extensions(stream: BinaryIO, n_bytes: int, order: Any) -> Iterator[str]:
    """Names of header extensions: each a size (with these 8 bytes), a code, then anything."""
    rest = stream.read(min(n_bytes, _LONGEST_HEADER))
    if not rest[:1].strip(b"\0"):
        return
    at = 4
    while at + 8 <= len(rest):
        size, code = (int.from_bytes(rest[at + k : at + k + 4], order) for k in (0, 4))
        if size < 8:
            return
        yield f"header extension of code {code}"
        at += size


def _of_nrrd(path: Path) -> dict[str, set[str]]:
    """Keys with values, comments, `content`, and the name of a second file."""
    found: dict[str, set[str]] = {"words": set(), "private": set()}
    with path.open("rb") as stream:
        stream.readline(_LONGEST_HEADER)
        while stream.tell() < _LONGEST_HEADER and (line := stream.readline(_LONGEST_HEADER).strip()):
            text = line.decode("utf-8", "replace")
            key, field = text.find(":="), text.find(": ")
            if text.startswith("#"):
                found["words"].add("comment")
            elif key >= 0 and not 0 <= field < key:
                found["private"].add(f"key {_shown(text[:key])}")
            elif text[: max(field, 0)].lower() in ("content", "data file", "datafile"):
                found["words"].add(text[:field].lower())
    return found


def _shown(key: str) -> str:
    """A key, as far as it is one plain word: others may hold anything."""
    word = key.strip()
    return word if len(word) <= 40 and word.isascii() and word.isprintable() else "of odd characters"


def days_apart(first: Path, second: Path) -> int | None:
    """Whole days from the first scan to the second; None unless both are DICOM and tell their dates.

    Parameters
    ----------
    first, second : Path

    Raises
    ------
    InputError
        A DICOM file that cannot be read.
    """
    if not (is_dicom(first) and is_dicom(second)):
        return None
    told = dicom_identity.days_apart(first, second)
    return None if told is None else told[0]
