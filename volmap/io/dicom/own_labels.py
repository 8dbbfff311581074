"""Labels of our own BINARY objects: their segments are numbered from 1, and the descriptions hold the labels.

Segment Numbers of BINARY must run 1, 2, 3, ... (PS3.3, C.8.20.2.4), whatever the labels were.
"""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Any

import numpy as np

from volmap.io.dicom.fields import items, text, whole
from volmap.types.volumes import LabelVolume

MAKER = "volmap"
_NO_CODE = "; no code was given, tissue stands for anything"


def described(label: int, *, with_codes: bool) -> str:
    """Segment Description: the label, and whether its codes were given."""
    return f"label {label}" + ("" if with_codes else _NO_CODE)


def label_in(description: str) -> int | None:
    """The label a Segment Description of ours speaks of; None for others'."""
    found = re.fullmatch(rf"label ([1-9][0-9]{{0,4}})({_NO_CODE})?", description)
    return int(found[1]) if found and int(found[1]) < 65536 else None


def as_they_were(volume: LabelVolume, ds: Any, *, names_given: bool) -> LabelVolume:
    """The labels an object of ours was written from; anybody else's volume as it is.

    Parameters
    ----------
    volume : LabelVolume
        Labels by Segment Number, names and codes from the segments.
    ds : pydicom.Dataset
        The object it was read from.
    names_given : bool
        True when the names are the user's, by label, and stay.
    """
    where = volume.name
    if text(ds, "ManufacturerModelName", where) != MAKER:
        return volume
    told = {whole(s, "SegmentNumber", where): text(s, "SegmentDescription", where)
            for s in items(ds, "SegmentSequence", where)}  # fmt: skip
    labels = {n: label_in(words) for n, words in told.items() if n}
    known = {n: label for n, label in labels.items() if label is not None}
    if not set(volume.present) <= set(known) or len(set(known.values())) < len(known):
        return volume
    table = np.zeros(65536, np.uint16)
    table[list(known)] = list(known.values())
    names = volume.names if names_given else {known[n]: s for n, s in volume.names.items() if n in known}
    codes = {known[n]: c for n, c in volume.codes.items() if n in known and not told[n].endswith(_NO_CODE)}
    return replace(volume, labels=table[volume.labels], names=names, codes=codes)
