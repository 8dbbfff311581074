"""What a segmentation object says of its segments (PS3.3 C.8.20.4, Segment Description)."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any

from volmap.io.dicom.fields import item, items, required, text, whole
from volmap.types.codes import Code, LabelCodes
from volmap.types.errors import InputError


@dataclass(frozen=True)
class Segment:
    """One segment.

    Parameters
    ----------
    label : str
        Segment Label, else what its type code means; free text.
    codes : LabelCodes, optional
        Category and type; None when one of them is missing.
    told_person : bool
        True when the Segment Label held the patient's name or number, and was left out for that.
    """

    label: str
    codes: LabelCodes | None
    told_person: bool = False


def segments_of(ds: Any, where: str) -> dict[int, Segment]:
    """Segments by Segment Number.

    Raises
    ------
    InputError
        None, a number that is missing, out of bounds or stands twice.
    """
    segments: dict[int, Segment] = {}
    person = _words_of_person(ds)
    for n, told in enumerate(items(ds, "SegmentSequence", where), start=1):
        at = f"{where}, segment {n}"
        number = required(whole(told, "SegmentNumber", at, most=65535), "SegmentNumber", at)
        if number in segments:
            raise InputError("a segment number stands twice", where=at, found=str(number))
        segments[number] = _segment(told, number, person, at)
    if not segments:
        raise InputError("describes no segment", where=where, remedy="export it again")
    return segments


def _words_of_person(ds: Any) -> tuple[frozenset[str], ...]:
    """The patient's whole name, and number, as the words they are made of; single short ones tell nobody."""
    found = []
    for keyword in ("PatientName", "PatientID"):
        try:
            words = _words(text(ds, keyword, ""))
        except InputError:  # damaged: no label can be compared with it
            continue
        if len(words) > 1 or any(len(word) > _SHORTEST_NUMBER for word in words if word.isalnum()):
            found.append(words)
    return tuple(found)


_SHORTEST_NUMBER = 3


def _words(told: str) -> frozenset[str]:
    return frozenset(re.findall(r"\w+", told.casefold().replace("_", " ")))


def _segment(told: Any, number: int, person: tuple[frozenset[str], ...], where: str) -> Segment:
    category = code_of(item(told, "SegmentedPropertyCategoryCodeSequence", where), where)
    kind, side = _narrowed(told, "SegmentedPropertyTypeCodeSequence", _KIND_MODIFIER, where)
    region, region_side = _narrowed(told, "AnatomicRegionSequence", _REGION_MODIFIER, where)
    label = text(told, "SegmentLabel", where)[:64]
    told_person = any(words <= _words(label) for words in person) and label != (kind and kind.meaning)
    label = (not told_person and label) or (kind.meaning if kind else "") or f"label {number}"
    codes = LabelCodes(category, kind, region, side, region_side) if category and kind else None
    return Segment(label, codes, told_person)


_KIND_MODIFIER, _REGION_MODIFIER = (
    "SegmentedPropertyTypeModifierCodeSequence",
    "AnatomicRegionModifierSequence",
)


def _narrowed(told: Any, keyword: str, modifier: str, where: str) -> tuple[Code | None, Code | None]:
    """A code and the first one that narrows it (left, right), which stands inside it."""
    entry = item(told, keyword, where)
    return code_of(entry, where), code_of(item(entry, modifier, where) if entry is not None else None, where)


def code_of(told: Any, where: str) -> Code | None:
    """A coded entry (PS3.3 8.8), whichever of the three fields holds its value; None when it is not whole.

    Raises
    ------
    InputError
        A field of it is damaged.
    """
    if told is None:
        return None
    values = (text(told, key, where) for key in ("CodeValue", "LongCodeValue", "URNCodeValue"))
    value = next(filter(None, values), "")
    scheme, meaning = text(told, "CodingSchemeDesignator", where), text(told, "CodeMeaning", where)
    return Code(value, scheme, meaning) if value and meaning else None
