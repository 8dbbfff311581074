"""Segmentation objects (PS3.3 A.51, C.8.20) as label volumes: a label is its Segment Number.

Our own BINARY objects say which label each number stands for (`own_labels`).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.fields import required, text, whole
from volmap.io.dicom.geometry import FunctionalGroups, Planes, Stack, planes_of_frames, stacked, together
from volmap.io.dicom.opening import PathLike, odd_values, parsed
from volmap.io.dicom.own_labels import as_they_were
from volmap.io.dicom.pixels import PixelLayout, pixel_layout, stored_frames
from volmap.io.dicom.segments import Segment, segments_of
from volmap.io.label_names import read_label_names
from volmap.io.opening import shown_name
from volmap.io.reading import AS_IT_IS, Reading
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.volumes import LabelVolume

SEGMENTATION = ("1.2.840.10008.5.1.4.1.1.66.4", "1.2.840.10008.5.1.4.1.1.66.7")  # bits or shares; label map
_KINDS = ("BINARY", "FRACTIONAL", "LABELMAP")  # Segmentation Type (0062,0001), C.8.20.2


def holds_segmentation(ds: Any, where: str) -> bool:
    """True for a data set of one of the segmentation storage classes.

    Parameters
    ----------
    ds : pydicom.Dataset
    where : str
        File name for an error.
    """
    return text(ds, "SOPClassUID", where) in SEGMENTATION


def read_segmentation(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[LabelVolume, tuple[Finding, ...]]:
    """A segmentation object: labels by Segment Number, names by Segment Label, codes, place in RAS+.

    Parameters
    ----------
    path : path
        One file.
    reading : Reading
        `threshold` is asked for where voxels hold shares (FRACTIONAL); `names` stands before Segment Labels.

    Raises
    ------
    InputError
        Not readable, no segmentation, no regular volume, shares and no threshold, or segments that overlap.
    """
    where = shown_name(path)
    with odd_values(where) as odd:
        ds = parsed(path)
        if not holds_segmentation(ds, where):
            modality = text(ds, "Modality", where)
            raise InputError(
                "is no segmentation", where=where, found=f"modality {modality[:16] or 'unknown'}",
                expected="a DICOM Segmentation object", remedy="give the segmentation drawn on it",
                refused=bool(modality),
            )  # fmt: skip
        if reading.frame is not None:
            raise InputError(
                "a segmentation object holds one volume", where=where,
                found=f"frame {reading.frame} asked for", remedy="leave out the frame", refused=True,
            )  # fmt: skip
        volume, findings = _labels(ds, reading, where)
    return volume, (*findings, *odd)


def _labels(ds: Any, reading: Reading, where: str) -> tuple[LabelVolume, tuple[Finding, ...]]:
    kind = text(ds, "SegmentationType", where)
    if kind not in _KINDS:
        raise InputError(
            "is a segmentation of an unknown type", where=where, expected=" or ".join(_KINDS),
            remedy="export it again as BINARY",
        )  # fmt: skip
    segments = segments_of(ds, where)
    layout = pixel_layout(ds, where)
    _require_bits(kind, layout, where)
    shares = _Shares.of(ds, kind, reading, where)
    groups = FunctionalGroups(ds, where)
    owners = None if kind == "LABELMAP" else _owners(groups, segments)
    names = [f"frame {n + 1}" for n in range(layout.n_frames)]
    planes = together(planes_of_frames(groups), layout.shape, names, where)
    stack = stacked(planes, gaps=True, downward=_downward(planes, owners))
    frames = stored_frames(ds, layout, where)
    labels = np.zeros(stack.grid.shape[::-1], np.uint16)  # planes, rows, columns
    if owners is None:
        _place_numbers(labels, frames, stack, planes, where)
        _set_background(labels, ds, segments, where)
    else:
        _place_masks(labels, map(shares.inside, frames), stack, owners, planes)
    called = read_label_names(reading.names) if reading.names else {n: s.label for n, s in segments.items()}
    codes = {n: s.codes for n, s in segments.items() if s.codes is not None}
    volume = LabelVolume(stack.grid, labels.T, called, where, codes)
    return as_they_were(volume, ds, names_given=reading.names is not None), (
        *groups.findings,
        *stack.findings,
        *shares.findings,
        *_said_of(volume, segments, reading.names),
    )


def _require_bits(kind: str, layout: PixelLayout, where: str) -> None:
    """C.8.20.2: BINARY has 1 bit, FRACTIONAL 8, LABELMAP 8 or 16."""
    wanted = {"BINARY": (1, 8), "FRACTIONAL": (8,), "LABELMAP": (8, 16)}[kind]  # packed BINARY unpacks to 8
    plain_bits = kind != "BINARY" or layout.bits == 1
    if layout.bits not in wanted or layout.keyword != "PixelData" or not plain_bits:
        raise InputError(
            "its pixels do not fit its type", where=where, found=f"{layout.bits} bits, {kind}",
            expected=f"{' or '.join(map(str, wanted[:1] if kind == 'BINARY' else wanted))} bits",
            remedy="export it again",
        )  # fmt: skip


def _owners(groups: FunctionalGroups, segments: dict[int, Segment]) -> NDArray[np.int64]:
    """(n,) the segment each frame belongs to (Segment Identification, C.8.20.3.1)."""
    owners = np.zeros(groups.n_frames, np.int64)
    for n in range(groups.n_frames):
        at = groups.name_of(n)
        named = required(groups.of(n, "SegmentIdentificationSequence"), "SegmentIdentificationSequence", at)
        keyword = "ReferencedSegmentNumber"
        owners[n] = required(whole(named, keyword, at, least=1, most=65535), keyword, at)
        if int(owners[n]) not in segments:
            raise InputError(
                "a frame belongs to a segment that is not described", where=at, found=f"segment {owners[n]}",
                expected=f"one of {_few(sorted(segments))}", remedy="export it again",
            )  # fmt: skip
    return owners


def _downward(planes: Planes, owners: NDArray[np.int64] | None) -> bool:
    """True when each segment's frames are listed against the normal: the order is kept, left-handed."""
    depth = planes.positions @ planes.normal
    groups = [depth] if owners is None else [depth[owners == segment] for segment in np.unique(owners)]
    return any(len(d) > 1 for d in groups) and all((np.diff(d) < 0).all() for d in groups)


@dataclass(frozen=True)
class _Shares:
    """From what stored value on a voxel is inside a segment."""

    least: float
    findings: tuple[Finding, ...] = ()

    @classmethod
    def of(cls, ds: Any, kind: str, reading: Reading, where: str) -> _Shares:
        """For FRACTIONAL the user's threshold of Maximum Fractional Value (0062,000E); else 1.

        Raises
        ------
        InputError
            A threshold is missing, or is none.
        """
        if kind != "FRACTIONAL":
            return cls(1, () if reading.threshold is None else (_unused_threshold(kind, where),))
        if reading.threshold is None:
            raise InputError(
                "its voxels hold shares from 0 to 1, not labels (FRACTIONAL)", where=where,
                remedy="say from which share on a voxel belongs to a segment, such as --threshold 0.5",
                refused=True,
            )  # fmt: skip
        if not 0 < reading.threshold <= 1:
            raise InputError(
                "a threshold lies above 0 and is at most 1", where=where, found=f"{reading.threshold:g}",
                remedy="give a share, such as --threshold 0.5", refused=True,
            )  # fmt: skip
        keyword = "MaximumFractionalValue"
        most = required(whole(ds, keyword, where, least=1, most=255), keyword, where)
        sort = text(ds, "SegmentationFractionalType", where).lower()[:16] or "share"
        sentence = f"a voxel belongs to a segment from a {sort} of {reading.threshold:g} on, as was asked for"
        finding = Finding(Level.NOTE, "thresholded", where, sentence)
        return cls(reading.threshold * most - 1e-9, (finding,))

    def inside(self, frame: NDArray[Any]) -> NDArray[np.bool_]:
        """(rows, columns) where a frame's segment is."""
        return np.asarray(frame >= self.least)


def _unused_threshold(kind: str, where: str) -> Finding:
    sentence = f"the threshold does nothing here: its voxels hold no shares ({kind})"
    return Finding(Level.WARN, "threshold_unused", where, sentence)


def _place_numbers(
    labels: NDArray[np.uint16], frames: Iterator[NDArray[Any]], stack: Stack, planes: Planes, where: str
) -> None:
    """LABELMAP: a pixel is its Segment Number."""
    _require_once(stack.index, planes, where)
    for k, frame in zip(stack.index, frames, strict=True):
        labels[k] = frame


def _set_background(labels: NDArray[np.uint16], ds: Any, segments: dict[int, Segment], where: str) -> None:
    """Outside is 0: Pixel Padding Value says which number it has in a LABELMAP (C.8.20.2)."""
    outside = whole(ds, "PixelPaddingValue", where, most=65535) or 0
    if outside and 0 in segments:
        raise InputError(
            "has a segment of number 0, which means outside here", where=where,
            remedy="number segments from 1 on", refused=True,
        )  # fmt: skip
    if outside:
        labels[labels == outside] = 0
    segments.pop(outside, None)


def _place_masks(
    labels: NDArray[np.uint16],
    masks: Iterator[NDArray[np.bool_]],
    stack: Stack,
    owners: NDArray[np.int64],
    planes: Planes,
) -> None:
    """BINARY and FRACTIONAL: a frame shows one segment; two in one voxel are refused."""
    for segment in np.unique(owners):
        _require_once(stack.index[owners == segment], planes, planes.where, segment=int(segment))
    overlap = _Overlap()
    for k, segment, mask in zip(stack.index, owners, masks, strict=True):
        taken = mask & (labels[k] > 0)
        if taken.any():
            overlap.note(int(k), taken, labels[k], int(segment))
        labels[k][mask & ~taken] = segment
    overlap.refuse(stack, planes.where)


class _Overlap:
    """Voxels that more than one segment claims, counted whatever Segments Overlap says."""

    def __init__(self) -> None:
        self.n = 0
        self.first: tuple[int, int, int] = (0, 0, 0)
        self.pair = (0, 0)

    def note(self, k: int, taken: NDArray[np.bool_], labels: NDArray[np.uint16], segment: int) -> None:
        """Count the voxels of one frame that are taken already."""
        if not self.n:
            j, i = (int(v) for v in np.argwhere(taken)[0])
            self.first, self.pair = (i, j, k), (int(labels[j, i]), segment)
        self.n += int(taken.sum())

    def refuse(self, stack: Stack, where: str) -> None:
        """Raise when any were counted.

        Raises
        ------
        InputError
        """
        if not self.n:
            return
        world = stack.grid.to_world(np.array([self.first], np.float64))[0]
        raise InputError(
            "segments overlap, and a voxel can have one label only", where=where,
            found=f"{self.n} voxels claimed twice, the first by segments {self.pair[0]} and {self.pair[1]} "
            f"at ({world[0]:.1f}, {world[1]:.1f}, {world[2]:.1f}) mm",
            remedy="export the segments that overlap in files of their own", refused=True,
        )  # fmt: skip


def _require_once(index: NDArray[np.int64], planes: Planes, where: str, *, segment: int = 0) -> None:
    places, counts = np.unique(index, return_counts=True)
    if counts.max(initial=0) > 1:
        n = int((counts > 1).sum())
        raise InputError(
            "has more than one frame at one place" + (f" for segment {segment}" if segment else ""),
            where=where, found=f"{n} such places, the first at plane {int(places[counts.argmax()])}",
            expected="one frame a place and segment", remedy="export one time or version alone",
        )  # fmt: skip


def _said_of(volume: LabelVolume, segments: dict[int, Segment], table: Path | None) -> Iterator[Finding]:
    present, where = set(volume.present), volume.name
    unknown, empty = sorted(present - set(segments)), sorted(set(segments) - present)
    if unknown:
        sentence = f"voxels hold numbers that no segment describes: {_few(unknown)}"
        yield Finding(Level.WARN, "segments_not_described", where, sentence)
    if empty:
        sentence = f"segments without a voxel: {_few(empty)}"
        yield Finding(Level.NOTE, "segments_empty", where, sentence)
    if table is None and any(s.told_person for s in segments.values()):
        numbers = _few(sorted(n for n, s in segments.items() if s.told_person))
        sentence = (
            f"Segment Labels that hold the patient's name or number are left out: of segments {numbers}"
        )
        yield Finding(Level.WARN, "names_left_out", where, sentence, "name labels by --names FILE")
    if table is None and any(s.label for s in segments.values()):
        sentence = "labels are named by the file's Segment Labels: free text that goes into what is written"
        yield Finding(
            Level.NOTE, "names_from_segments", where, sentence, "give --names FILE if they name a person"
        )  # fmt: skip


def _few(numbers: Sequence[int]) -> str:
    return ", ".join(map(str, numbers[:8])) + (f" and {len(numbers) - 8} more" if len(numbers) > 8 else "")
