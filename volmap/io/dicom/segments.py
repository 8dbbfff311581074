"""What a segmentation object says of its segments (PS3.3 C.8.20.4, Segment Description)."""

from __future__ import annotations

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
    """

    label: str
    codes: LabelCodes | None


def segments_of(ds: Any, where: str) -> dict[int, Segment]:
    """Segments by Segment Number.

    Raises
    ------
    InputError
        None, a number that is missing, out of bounds or stands twice.
    """
    segments: dict[int, Segment] = {}
    for n, told in enumerate(items(ds, "SegmentSequence", where), start=1):
        at = f"{where}, segment {n}"
        number = required(whole(told, "SegmentNumber", at, most=65535), "SegmentNumber", at)
        if number in segments:
            raise InputError("a segment number stands twice", where=at, found=str(number))
        segments[number] = _segment(told, number, at)
    if not segments:
        raise InputError("describes no segment", where=where, remedy="export it again")
    return segments


def _segment(told: Any, number: int, where: str) -> Segment:
    category = code_of(item(told, "SegmentedPropertyCategoryCodeSequence", where), where)
    kind, side = _narrowed(told, "SegmentedPropertyTypeCodeSequence", _KIND_MODIFIER, where)
    region, region_side = _narrowed(told, "AnatomicRegionSequence", _REGION_MODIFIER, where)
    label = text(told, "SegmentLabel", where)[:64] or (kind.meaning if kind else "") or f"label {number}"
    codes = LabelCodes(category, kind, region, side, region_side) if category and kind else None
    return Segment(label, codes)


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
