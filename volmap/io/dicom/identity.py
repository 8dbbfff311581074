"""Which fields of a DICOM object could tell who, where and when: names of fields, never their values.

The table of fields is `identifying_kinds`.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from volmap.io.dicom.fields import text
from volmap.io.dicom.opening import odd_values
from volmap.io.dicom.series import headers
from volmap.io.identifying_kinds import kind_by_field, kind_by_type
from volmap.io.opening import shown_name
from volmap.types.errors import InputError

_OF_THE_STANDARD = b"1.2.840.10008."  # UIDs of DICOM itself (PS3.5, 9)
_OF_A_PROGRAM = ("ImplementationClassUID",)
_PAD = b" \0"
_PREAMBLE = "the 128 bytes before the object"


def fields_of(path: Path) -> dict[str, set[str]]:
    """Names of identifying fields that are not empty, by kind; of a folder, those of all its DICOM files.

    Parameters
    ----------
    path : Path

    Raises
    ------
    InputError
        A file that cannot be read.
    """
    found: dict[str, set[str]] = {}
    with odd_values(shown_name(path)):  # what is odd is said by the reader
        for name, ds in headers(path):
            _add_pixel_fields(ds, found, name)
            for part in (ds, getattr(ds, "file_meta", None)):
                for kind, keyword in _walked(part) if part is not None else ():
                    found.setdefault(kind, set()).add(keyword)
    return found


def _add_pixel_fields(ds: Any, found: dict[str, set[str]], where: str) -> None:
    """What is told by a value, or before the object begins."""
    for keyword in ("BurnedInAnnotation", "RecognizableVisualFeatures"):
        try:
            said = text(ds, keyword, where)
        except InputError:
            said = "YES"  # it cannot be read, so it does not say no
        if said == "YES":
            found.setdefault("pictures", set()).add(keyword)
    if (getattr(ds, "preamble", None) or b"").strip(b"\0"):
        found.setdefault("private", set()).add(_PREAMBLE)


def _walked(ds: Any) -> Iterator[tuple[str, str]]:
    """(kind, name) of every identifying field that is not empty, those inside sequences too."""
    from pydicom.datadict import keyword_for_tag

    for tag in list(ds.keys()):
        as_stored, type_of_value = _stored(ds, tag)
        if tag.is_private:
            if _says_something(as_stored):
                yield "private", f"({tag.group:04X},xxxx)"
            continue
        if type_of_value == "SQ":
            yield from _inside(ds, tag)
        keyword = keyword_for_tag(tag) or f"({tag.group:04X},{tag.element:04X})"
        kind = kind_by_field().get(keyword) or kind_by_type().get(type_of_value)
        if kind is not None and _says_something(as_stored) and not _standard(kind, keyword, as_stored):
            yield kind, keyword


def _stored(ds: Any, tag: Any) -> tuple[Any, str]:
    """A field's value, not decoded, and its type by the dictionary, else by the file; "?" if damaged."""
    from pydicom.datadict import dictionary_has_tag, dictionary_VR

    try:
        raw = ds.get_item(tag)
        as_stored, told = raw.value, str(raw.VR or "UN")
    except Exception:  # pydicom decodes some after all, and meets damaged ones in any way at all
        as_stored, told = b"?", "UN"
    return as_stored, dictionary_VR(tag) if dictionary_has_tag(tag) else told


def _inside(ds: Any, tag: Any) -> Iterator[tuple[str, str]]:
    try:
        held = list(ds[tag].value or ())
    except Exception:  # a damaged sequence: pydicom meets it in any way at all; nothing can be told of it
        return
    for part in held:
        if hasattr(part, "get_item"):
            yield from _walked(part)


def _says_something(value: Any) -> bool:
    if isinstance(value, bytes):
        return bool(value.strip(_PAD))
    if value is None or isinstance(value, int | float):
        return value is not None
    return bool(str(value).strip()) if isinstance(value, str) else bool(len(value))


def _standard(kind: str, keyword: str, value: Any) -> bool:
    """A UID that names something of DICOM, or the program that wrote the file."""
    if kind != "uids":
        return False
    if keyword in _OF_A_PROGRAM:
        return True
    told = value if isinstance(value, bytes) else str(value).encode("ascii", "replace")
    return told.startswith(_OF_THE_STANDARD)


def days_apart(first: Path, second: Path) -> tuple[int, str] | None:
    """Whole days from the first scan to the second, and by which field; None when either does not say.

    The date of acquisition counts when both tell it, else that of the study (of a segmentation: of the study
    of its images).  The dates go no farther than this.

    Parameters
    ----------
    first, second : Path
        DICOM files or folders.

    Raises
    ------
    InputError
        A file that cannot be read.
    """
    with odd_values(shown_name(first)):
        heads = [next(headers(path), None) for path in (first, second)]
        if heads[0] is None or heads[1] is None:
            return None
        for keyword, others in (("AcquisitionDate", ("AcquisitionDateTime",)), ("StudyDate", ())):
            days = [_day(ds, (keyword, *others), where) for where, ds in filter(None, heads)]
            if days[0] is not None and days[1] is not None:
                return (days[1] - days[0]).days, keyword
    return None


def _day(ds: Any, keywords: tuple[str, ...], where: str) -> datetime.date | None:
    for keyword in keywords:
        try:
            digits = text(ds, keyword, where).replace(".", "")[:8]
            return datetime.date(int(digits[:4]), int(digits[4:6]), int(digits[6:8]))
        except (InputError, ValueError):
            continue
    return None
