"""Stored numbers of a DICOM object, frame by frame; claims are checked before memory is taken."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.codestreams import packed_size
from volmap.io.dicom.fields import required, text, value, whole
from volmap.types.errors import InputError

_KEYWORDS = ("PixelData", "FloatPixelData", "DoubleFloatPixelData")
_UNPACKED_FREELY = 2**27  # bytes that packed pixels may always unpack to
_PACKED_AT_BEST = 1032  # and how often they may hold their own size (zlib's bound, taken for all packings)
_MOST_VOXELS = 2**31
_UNCOMPRESSED = (
    "1.2.840.10008.1.2", "1.2.840.10008.1.2.1", "1.2.840.10008.1.2.1.99", "1.2.840.10008.1.2.2",
)  # fmt: skip
_SIZED_BY_THE_OBJECT = ("1.2.840.10008.1.2.5",)  # run lengths
_WITHOUT_IMAGES = ("SR", "PR", "KO", "REG", "FID", "RTSTRUCT", "RTPLAN", "RTRECORD", "DOC", "ECG", "PLAN")


@dataclass(frozen=True)
class PixelLayout:
    """How the pixels of an object are laid out (PS3.3 C.7.6.3).

    Parameters
    ----------
    keyword : str
        The field they stand in.
    rows, columns, n_frames, bits : int
    syntax : str
        UID of the transfer syntax.
    """

    keyword: str
    rows: int
    columns: int
    n_frames: int
    bits: int
    syntax: str

    @property
    def shape(self) -> tuple[int, int]:
        """Rows, columns."""
        return self.rows, self.columns


def pixel_layout(ds: Any, where: str) -> PixelLayout:
    """What an object says of its pixels.

    Raises
    ------
    InputError
        No pixels, several numbers a pixel, or fields that are missing or nonsense.
    """
    keyword = next((name for name in _KEYWORDS if name in ds), "PixelData")
    if keyword not in ds and "Rows" not in ds:
        modality = text(ds, "Modality", where)
        raise InputError(
            "holds no image", where=where, found=f"modality {modality[:16] or 'unknown'}",
            expected="a segmentation object or images", remedy="give the file or folder of the images",
            refused=modality in _WITHOUT_IMAGES,
        )  # fmt: skip
    rows, columns = (
        required(whole(ds, name, where, least=1, most=65535), name, where) for name in ("Rows", "Columns")
    )
    if whole(ds, "SamplesPerPixel", where) not in (1, None):
        raise InputError(
            "holds colours", where=where, found=text(ds, "PhotometricInterpretation", where)[:16],
            expected="one number a pixel", remedy="export the grey values or the segmentation itself",
            refused=True,
        )  # fmt: skip
    bits = required(whole(ds, "BitsAllocated", where, most=64), "BitsAllocated", where)
    wanted = {"FloatPixelData": (32,), "DoubleFloatPixelData": (64,)}.get(keyword, (1, 8, 16, 32))
    if bits not in wanted:
        raise InputError(
            "its pixels are of a size DICOM does not have", where=where, found=f"{bits} bits",
            expected=" or ".join(map(str, wanted)),
        )  # fmt: skip
    n = whole(ds, "NumberOfFrames", where, least=1) or 1
    syntax = text(getattr(ds, "file_meta", {}), "TransferSyntaxUID", where)
    return PixelLayout(keyword, rows, columns, n, bits, syntax)


def stored_frames(ds: Any, layout: PixelLayout, where: str) -> Iterator[NDArray[Any]]:
    """Each frame as (rows, columns) numbers as stored, in the order of the file.

    Raises
    ------
    InputError
        Fewer bytes than pixels, a packing that cannot be unpacked here, or damaged pixels.
    """
    data = value(ds, layout.keyword, where)
    if data is None:
        raise InputError(
            "holds no pixels", where=where, remedy="copy or export it again; the file may be cut short"
        )
    _require_room(layout, len(data), where)
    if layout.syntax in _UNCOMPRESSED and layout.bits == 1:
        return _bits(bytes(data), layout)
    return _decoded(ds, layout, where)


def _require_room(layout: PixelLayout, n_bytes: int, where: str) -> None:
    n_pixels = layout.rows * layout.columns * layout.n_frames
    wanted = -(-n_pixels * layout.bits // 8)
    plain = layout.syntax in _UNCOMPRESSED
    if wanted > (n_bytes if plain else max(_UNPACKED_FREELY, _PACKED_AT_BEST * n_bytes)):
        raise InputError(
            "the pixels are cut short", where=where,
            found=f"{n_bytes} bytes, which cannot hold {layout.n_frames} frames of {layout.rows} x "
            f"{layout.columns} pixels of {layout.bits} bits",
            expected=f"{wanted} bytes", remedy="copy or export it again",
        )  # fmt: skip
    if n_pixels > _MOST_VOXELS:
        raise InputError(
            "the volume is too large", where=where, found=f"{n_pixels} voxels",
            expected=f"at most {_MOST_VOXELS}", remedy="crop it to the organ", refused=True,
        )  # fmt: skip


def _bits(data: bytes, layout: PixelLayout) -> Iterator[NDArray[np.uint8]]:
    """Frames of single bits: first pixel in the lowest bit, frames without padding between (PS3.5 8.1.1)."""
    packed, n = np.frombuffer(data, np.uint8), layout.rows * layout.columns
    for frame in range(layout.n_frames):
        first, last = frame * n, (frame + 1) * n
        some = np.unpackbits(packed[first // 8 : -(-last // 8)], bitorder="little")
        yield some[first % 8 : first % 8 + n].reshape(layout.shape)


def _decoded(ds: Any, layout: PixelLayout, where: str) -> Iterator[NDArray[Any]]:
    from pydicom.pixels.decoders.base import get_decoder
    from pydicom.uid import UID

    uid = UID(layout.syntax)
    try:
        decoder = get_decoder(uid)
    except Exception:  # whatever a damaged UID leads to
        decoder = None
    if decoder is None or not decoder.is_available:
        raise InputError(
            "its pixels are packed in a way that cannot be unpacked here", where=where,
            found="an unknown transfer syntax" if uid.name == layout.syntax else uid.name,
            remedy="export it uncompressed (Explicit VR Little Endian)",
        )  # fmt: skip
    n = 0
    try:
        _require_told_size(ds, layout, decoder.is_encapsulated)
        for frame, _ in decoder.iter_array(ds, raw=True, indices=range(layout.n_frames)):
            if frame.shape != layout.shape:
                raise ValueError("another shape than claimed")
            n += 1
            yield frame
        if n != layout.n_frames:
            raise ValueError("fewer frames than claimed")
    except Exception as fault:  # decoders meet damaged pixels in any way at all
        raise InputError(
            "the pixels cannot be unpacked", where=f"{where}, frame {n + 1}",
            found=f"damaged data for {uid.name}", remedy="copy or export it again",
        ) from fault  # fmt: skip


def _require_told_size(ds: Any, layout: PixelLayout, encapsulated: bool) -> None:
    """Raise for a packed frame that says it is of another size than the object says."""
    from pydicom.encaps import generate_frames

    if not encapsulated or layout.syntax in _SIZED_BY_THE_OBJECT:
        return
    for frame in generate_frames(ds[layout.keyword].value, number_of_frames=layout.n_frames):
        if packed_size(frame) != layout.shape:
            raise ValueError("a frame says it is of another size")
