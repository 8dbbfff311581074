"""Label volumes as DICOM Segmentation (PS3.3, A.51 and C.8.20.2): BINARY, or LABELMAP.

A frame is one plane of constant k: i runs along its rows, j down its columns; frames are listed in the order
of k, each with its place, so that a left-handed grid stays what it was.  BINARY has one frame a label
and plane where the label occurs, and every plane of the first label, so that a reader finds the whole grid.
Its segments must be numbered 1, 2, 3, ... (C.8.20.2.4), so the label itself stands in Segment Description,
in the words of `own_labels`.  LABELMAP has one frame a plane, and its pixels are the labels.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.laying import Laid, decimals, laid
from volmap.io.dicom.object_head import PathLike, begun, coded, put, text
from volmap.io.dicom.own_labels import described
from volmap.io.dicom.uids import ScanUids, new_uid
from volmap.types.codes import Code, LabelCodes
from volmap.types.errors import InputError
from volmap.types.volumes import LabelVolume

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

Coding = Literal["binary", "labelmap"]
SOP_CLASSES: dict[Coding, str] = {
    "binary": "1.2.840.10008.5.1.4.1.1.66.4",
    "labelmap": "1.2.840.10008.5.1.4.1.1.66.7",
}
TISSUE = Code("85756007", "SCT", "Tissue")
NO_CODES = LabelCodes(TISSUE, TISSUE)  # CID 7150 and CID 7166: as general as they go
_BACKGROUND = Code("125040", "DCM", "Background")
_SEGMENT, _POSITION = 0x0062000B, 0x00200032
_LARGEST_BYTES = 2**32 - 2


def write_segmentation(
    path: PathLike,
    volume: LabelVolume,
    *,
    scan: ScanUids,
    coding: Coding = "binary",
    made_by: str = "",
    overwrite: bool = False,
) -> None:
    """Write a label volume as a DICOM Segmentation.

    Parameters
    ----------
    path : path
        Ends in .dcm.
    volume : LabelVolume
        Names and codes go along; a label without codes is called tissue, and its description says so.
    scan : ScanUids
        The scan whose grid it lies on.
    coding : 'binary' or 'labelmap'
    made_by : str
        How the labels came about, in a sentence.
    overwrite : bool

    Raises
    ------
    InputError
        No label in it, axes that are not orthogonal, too many voxels or labels, or a place that is taken.
    """
    if not volume.present:
        raise InputError("holds no label", where=volume.name, remedy="nothing can be written", refused=True)
    grid = laid(volume.grid, where=volume.name)
    planes = volume.labels.transpose(2, 1, 0)  # plane, row, column
    kept = _frames(planes, volume.present) if coding == "binary" else [(0, k) for k in range(len(planes))]
    _require_room(planes, len(kept), coding, volume.name)
    made = begun(
        scan, sop_class=SOP_CLASSES[coding], modality="SEG", description="labels, research only",
        told=f"{made_by} Frame of reference: {scan.origin}.".strip(),
    )  # fmt: skip
    made.ContentLabel, made.ImageType = "LABELS", ["DERIVED", "PRIMARY"]
    made.LossyImageCompression, made.SegmentationType = "00", coding.upper()
    made.SegmentsOverlap = "NO"
    made.SegmentSequence = list(_segments(volume, coding))
    _pixel_module(made, planes, len(kept), coding, volume.present[-1])
    _dimensions(made, scan, coding)
    made.SharedFunctionalGroupsSequence = [_shared(grid)]
    made.PerFrameFunctionalGroupsSequence = [_frame(grid, s, k, coding) for s, k in kept]
    made.PixelData = (
        _packed(planes, kept, volume.present)
        if coding == "binary"
        else planes.astype(f"<u{made.BitsAllocated // 8}").tobytes()
    )
    if len(made.PixelData) % 2:
        made.PixelData += b"\0"
    put(path, made, overwrite=overwrite)


def _require_room(planes: NDArray[np.uint16], n_frames: int, coding: Coding, where: str) -> None:
    _, rows, columns = planes.shape
    bits = 1 if coding == "binary" else 16
    if max(rows, columns) > 65535 or n_frames * rows * columns * bits // 8 > _LARGEST_BYTES:
        raise InputError(
            "is too large for one DICOM object",
            where=where,
            found=f"{n_frames} frames of {rows} x {columns}",
            expected=f"at most 65535 rows and columns and {_LARGEST_BYTES} bytes",
            remedy="crop it to the body",
            refused=True,
        )


def _frames(planes: NDArray[np.uint16], labels: tuple[int, ...]) -> list[tuple[int, int]]:
    """(segment from 0, plane): where each label occurs, and all planes of the first."""
    seen = np.zeros((len(planes), 65536), bool)
    for k, plane in enumerate(planes):
        seen[k, plane] = True
    seen[:, labels[0]] = True
    return [(s, k) for s, label in enumerate(labels) for k in np.flatnonzero(seen[:, label]).tolist()]


def _packed(planes: NDArray[np.uint16], kept: list[tuple[int, int]], labels: tuple[int, ...]) -> bytes:
    """One bit a pixel, least significant first, frames one after the other without gaps (PS3.5, 8.2)."""

    def eight_frames() -> Iterator[bytes]:  # which always end at a whole byte
        for first in range(0, len(kept), 8):
            bits = [planes[k] == labels[s] for s, k in kept[first : first + 8]]
            yield np.packbits(np.stack(bits).ravel(), bitorder="little").tobytes()

    return b"".join(eight_frames())


def _segments(volume: LabelVolume, coding: Coding) -> Iterator[Dataset]:
    if coding == "labelmap":
        yield _segment(0, "Background", LabelCodes(_BACKGROUND, _BACKGROUND), "no label")
    for number, label in enumerate(volume.present, 1):
        codes = volume.codes.get(label)
        yield _segment(
            number if coding == "binary" else label,
            volume.name_of(label),
            codes or NO_CODES,
            described(label, with_codes=codes is not None),
        )


def _segment(number: int, name: str, codes: LabelCodes, description: str) -> Dataset:
    from pydicom.dataset import Dataset

    made = Dataset()
    made.SegmentNumber = number
    made.SegmentLabel = text(name, "LO") or f"segment {number}"
    made.SegmentDescription = text(description, "ST")
    made.SegmentAlgorithmType, made.SegmentAlgorithmName = "SEMIAUTOMATIC", "volmap"
    made.SegmentedPropertyCategoryCodeSequence = [_entry(codes.category)]
    modifier = "SegmentedPropertyTypeModifierCodeSequence"
    made.SegmentedPropertyTypeCodeSequence = [_entry(codes.kind, modifier, codes.side)]
    if codes.region:
        made.AnatomicRegionSequence = [
            _entry(codes.region, "AnatomicRegionModifierSequence", codes.region_side)
        ]
    return made


def _entry(code: Code, modifier: str = "", narrowed: Code | None = None) -> Dataset:
    """A coded entry, with the one that narrows it inside."""
    made = coded(code.value, code.scheme, code.meaning)
    if narrowed:
        setattr(made, modifier, [_entry(narrowed)])
    return made


def _pixel_module(
    made: Dataset, planes: NDArray[np.uint16], n_frames: int, coding: Coding, most: int
) -> None:
    """C.7.6.3, and the values C.8.20.2 demands."""
    bits = 1 if coding == "binary" else (8 if most < 256 else 16)
    made.NumberOfFrames, made.Rows, made.Columns = n_frames, planes.shape[1], planes.shape[2]
    made.SamplesPerPixel, made.PhotometricInterpretation, made.PixelRepresentation = 1, "MONOCHROME2", 0
    made.BitsAllocated = made.BitsStored = bits
    made.HighBit = bits - 1
    if coding == "labelmap":
        made.PixelPaddingValue = 0


def _dimensions(made: Dataset, scan: ScanUids, coding: Coding) -> None:
    """C.7.6.17: by segment (BINARY only), then by place."""
    from pydicom.dataset import Dataset

    organisation = Dataset()
    organisation.DimensionOrganizationUID = new_uid("dimensions", coding, scan.study)
    made.DimensionOrganizationSequence = [organisation]
    by_segment = [(_SEGMENT, 0x0062000A, "Segment Number")] if coding == "binary" else []
    made.DimensionIndexSequence = []
    for pointer, group, label in [*by_segment, (_POSITION, 0x00209113, "Image Position Patient")]:
        index = Dataset()
        index.DimensionOrganizationUID = organisation.DimensionOrganizationUID
        index.DimensionIndexPointer, index.FunctionalGroupPointer = pointer, group
        index.DimensionDescriptionLabel = label
        made.DimensionIndexSequence.append(index)


def _shared(grid: Laid) -> Dataset:
    """C.7.6.16.2.1 and C.7.6.16.2.4; Pixel Spacing is first between rows, then between columns."""
    from pydicom.dataset import Dataset

    measures, orientation, made = Dataset(), Dataset(), Dataset()
    across, down, between = decimals(grid.spacing)
    measures.PixelSpacing = [down, across]
    measures.SliceThickness = measures.SpacingBetweenSlices = between
    orientation.ImageOrientationPatient = grid.orientation
    made.PixelMeasuresSequence, made.PlaneOrientationSequence = [measures], [orientation]
    return made


def _frame(grid: Laid, segment: int, k: int, coding: Coding) -> Dataset:
    """C.7.6.16.2.2, C.7.6.16.2.3 and C.8.20.3.1."""
    from pydicom.dataset import Dataset

    content, position, made, plane = Dataset(), Dataset(), Dataset(), grid.place(k)
    content.DimensionIndexValues = [segment + 1, plane + 1] if coding == "binary" else [plane + 1]
    position.ImagePositionPatient = grid.position(plane)
    made.FrameContentSequence, made.PlanePositionSequence = [content], [position]
    if coding == "binary":
        identified = Dataset()
        identified.ReferencedSegmentNumber = segment + 1
        made.SegmentIdentificationSequence = [identified]
    return made
