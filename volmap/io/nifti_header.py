"""What a NIfTI file says of itself, checked before a voxel is read.

Layout from the official headers nifti1.h (2003-2019) and nifti2.h (2014).
"""

from __future__ import annotations

import gzip
import math
import os
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from volmap.io.opening import cannot_open, existing_file, shown_name
from volmap.io.voxel_bytes import DEFLATE_AT_BEST, cut_short, read_exactly, require_end, require_room, skip
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid

DISPVECT = 1006
_FARTHEST = 2**30  # no header with all its extensions is longer than this
_VOXEL_TYPES = {
    2: "u1", 4: "i2", 8: "i4", 16: "f4", 64: "f8", 256: "i1", 512: "u2", 768: "u4", 1024: "i8", 1280: "u8",
}  # fmt: skip
_OTHER_TYPES = {
    0: "no type", 1: "single bits", 32: "complex numbers", 128: "RGB colours", 1536: "128-bit floats",
    1792: "complex numbers", 2048: "complex numbers", 2304: "RGBA colours",
}  # fmt: skip


@dataclass(frozen=True)
class NiftiHeader:
    """The checked part of a header.

    Parameters
    ----------
    name : str
        File name, no folders.
    shape : tuple of int
        All dimensions, trailing ones included.
    intent : int
    dtype : dtype
        As stored, byte order included.
    offset : int
        First byte of the voxels.
    apart : bool
        True when the voxels are in a second file (.img).
    slope, inter : float
        ``value = slope * stored + inter``; 1 and 0 when the header gives none.
    affine : (4, 4) float64
        Voxel centres to RAS+ world, mm.
    findings : tuple of Finding
    """

    name: str
    shape: tuple[int, ...]
    intent: int
    dtype: np.dtype[Any]
    offset: int
    apart: bool
    slope: float
    inter: float
    affine: NDArray[np.float64]
    findings: tuple[Finding, ...]

    @property
    def n_frames(self) -> int:
        """Volumes in the file, whatever axis after the third they are along."""
        return math.prod(self.shape[3:])


@contextmanager
def opened(path: str | os.PathLike[str]) -> Iterator[tuple[BinaryIO, Path]]:
    """A stream of the file's bytes, unpacked when it is gzip (by content, not by name).

    Raises
    ------
    InputError
        The file cannot be opened; or, while the block reads, the packed data end early or are damaged.
    """
    file = existing_file(path)
    where = shown_name(path)
    try:
        with file.open("rb") as raw:
            packed = raw.read(2) == b"\x1f\x8b"
            raw.seek(0)
            if packed:
                with gzip.GzipFile(fileobj=raw, mode="rb") as stream:
                    yield stream, file  # type: ignore[misc]
            else:
                yield raw, file
    except EOFError as fault:
        raise cut_short(where, "packed data that end early") from fault
    except (gzip.BadGzipFile, zlib.error) as fault:
        raise InputError(
            "the packed data are damaged", where=where, remedy="copy or export the file again"
        ) from fault
    except OSError as fault:
        raise cannot_open(path, fault) from fault


def files_of(path: str | os.PathLike[str]) -> tuple[Path, Path | None]:
    """The file with the header and, when the name is one of a pair (.hdr and .img), that with the voxels.

    Raises
    ------
    InputError
        Half of the pair is missing.
    """
    file = Path(path)
    stem, packed = (file.name[:-3], True) if file.name.lower().endswith(".gz") else (file.name, False)
    ending = Path(stem).suffix.lower()
    if ending not in (".hdr", ".img"):
        return file, None
    existing_file(file)
    partner = {".hdr": ".img", ".img": ".hdr"}[ending]
    partner = partner.upper() if Path(stem).suffix.isupper() else partner
    bare = Path(stem).stem + partner
    names = [bare + ".gz", bare] if packed else [bare, bare + ".gz"]
    beside = next((file.with_name(n) for n in names if file.with_name(n).is_file()), None)
    if beside is None:
        raise InputError(
            "the other file of the pair is missing", where=shown_name(path), expected=bare,
            remedy="keep both in one folder, or join them into one .nii",
        )  # fmt: skip
    return (file, beside) if ending == ".hdr" else (beside, file)


def read_header(stream: BinaryIO, file: Path) -> NiftiHeader:
    """Read and check the header.

    Raises
    ------
    InputError
        Not NIfTI, a part of it nonsense, or no orientation.
    """
    where = shown_name(file)
    raw = _parsed(stream, where)
    shape = _shape(raw, where)
    dtype = _dtype(raw, where)
    slope, inter = _scaling(raw, where)
    affine, findings = _orientation(raw, shape[:3], where)
    return NiftiHeader(
        where, shape, int(raw["intent_code"]), dtype, _offset(raw, where), bool(raw["apart"]), slope, inter,
        affine, findings,
    )  # fmt: skip


def read_voxels(
    header: NiftiHeader, stream: BinaryIO, file: Path, *, at: int, frames: range | None = None
) -> NDArray[Any]:
    """The stored numbers, not scaled.

    Parameters
    ----------
    header : NiftiHeader
    stream, file
        As `opened` gives them; of the second file when the voxels are apart.
    at : int
        Bytes of the stream read so far.
    frames : range, optional
        Neighbouring frames to read; all by default.

    Returns
    -------
    (I, J, K, F) array

    Raises
    ------
    InputError
        The file cannot hold the voxels, or ends before they do.
    """
    one = math.prod(header.shape[:3])
    wanted = range(header.n_frames) if frames is None else frames
    size, packed = file.stat().st_size, isinstance(stream, gzip.GzipFile)
    require_room(
        one * header.n_frames, header.dtype,
        bytes_there=size if packed else max(size - header.offset, 0),
        best_packing=DEFLATE_AT_BEST if packed else 1, where=shown_name(file), most=one * len(wanted),
    )  # fmt: skip
    skip(stream, header.offset + wanted.start * one * header.dtype.itemsize - at, shown_name(file))
    data = read_exactly(stream, one * len(wanted) * header.dtype.itemsize, shown_name(file))
    if wanted.stop == header.n_frames:
        require_end(stream, shown_name(file))
    return data.view(header.dtype).reshape((*header.shape[:3], len(wanted)), order="F")


def _not_nifti(where: str, found: str) -> InputError:
    return InputError(
        "is not a NIfTI file", where=where, found=found, expected="NIfTI-1 or NIfTI-2",
        remedy="export the segmentation as NIfTI",
    )  # fmt: skip


def _parsed(stream: BinaryIO, where: str) -> dict[str, Any]:
    import nibabel as nib

    first = stream.read(4)
    sizes = {int.from_bytes(first, "little"), int.from_bytes(first, "big")} if len(first) == 4 else set()
    if not sizes & {348, 540}:
        raise _not_nifti(where, f"a file that begins with {first.decode('latin-1')!r}")
    kind: Any = nib.Nifti1Header if 348 in sizes else nib.Nifti2Header
    length = max(sizes & {348, 540})
    block = first + stream.read(length - 4)
    if len(block) < length:
        raise cut_short(where, f"{len(block)} of {length} bytes of header")
    magic = block[344:348] if length == 348 else block[4:12]
    apart = magic in (b"ni1\0", b"ni2\0\r\n\x1a\n")
    if apart and Path(where.lower().removesuffix(".gz")).suffix != ".hdr":
        raise InputError(
            "the voxels are in a second file (.hdr and .img)", where=where,
            remedy="name the .hdr of the pair, or join them into one .nii",
        )  # fmt: skip
    if not apart and magic not in (b"n+1\0", b"n+2\0\r\n\x1a\n"):
        raise _not_nifti(where, f"magic {magic!r}")
    order = "<" if int.from_bytes(first, "little") == length else ">"
    structure = kind(block, endianness=order, check=False).structarr
    raw: dict[str, Any] = {key: structure[key].tolist() for key in structure.dtype.names}
    return raw | {"order": order, "length": length, "apart": apart}


def _shape(raw: dict[str, Any], where: str) -> tuple[int, ...]:
    n = int(raw["dim"][0])
    lengths = tuple(int(v) for v in raw["dim"][1 : n + 1]) if 1 <= n <= 7 else ()
    if not lengths or min(lengths) < 1:
        raise InputError(
            "the header's dimensions are nonsense", where=where, found=f"dim {list(raw['dim'])}",
            remedy="export the file again",
        )  # fmt: skip
    if n < 3:
        raise InputError(
            "the volume has too few dimensions", where=where, found=f"{n}", expected="3",
            remedy="give the whole stack of slices as one volume", refused=True,
        )  # fmt: skip
    return lengths


def _dtype(raw: dict[str, Any], where: str) -> np.dtype[Any]:
    code = int(raw["datatype"])
    if code not in _VOXEL_TYPES:
        raise InputError(
            "the voxels are of a type that cannot be used",
            where=where,
            found=_OTHER_TYPES.get(code, f"type code {code}"),
            expected="one whole or real number a voxel",
            remedy="export one plain number a voxel",
            refused=code in _OTHER_TYPES,
        )
    dtype: np.dtype[Any] = np.dtype(str(raw["order"]) + _VOXEL_TYPES[code])
    if raw["bitpix"] != 8 * dtype.itemsize:
        raise InputError(
            "the header contradicts itself on the size of a voxel", where=where,
            found=f"{raw['bitpix']} bits", expected=f"{8 * dtype.itemsize}",
        )  # fmt: skip
    return dtype


def _offset(raw: dict[str, Any], where: str) -> int:
    offset, least = float(raw["vox_offset"]), 0 if raw["apart"] else int(raw["length"]) + 4
    if not (least <= offset < _FARTHEST and offset == int(offset)):
        raise InputError(
            "the header does not say where the voxels begin", where=where, found=f"byte {offset:g}",
            expected=f"{least} or more",
        )  # fmt: skip
    return int(offset)


def _scaling(raw: dict[str, Any], where: str) -> tuple[float, float]:
    slope, inter = float(raw["scl_slope"]), float(raw["scl_inter"])
    if slope == 0 or np.isnan(slope):  # nifti1.h: no scaling
        return 1.0, 0.0
    if not (np.isfinite(slope) and np.isfinite(inter)):
        raise InputError("the header's scaling is nonsense", where=where, found=f"{slope} and {inter}")
    return slope, inter


def _orientation(
    raw: dict[str, Any], shape: tuple[int, ...], where: str
) -> tuple[NDArray[np.float64], tuple[Finding, ...]]:
    _require_spacing(raw, where)
    _require_millimetres(raw, where)
    codes = int(raw["sform_code"]), int(raw["qform_code"])
    if max(codes) <= 0:
        raise InputError(
            "the header gives no orientation (sform_code and qform_code are 0)", where=where,
            remedy="export it with its orientation, or copy the header geometry of the scan it was drawn on",
            refused=True,
        )  # fmt: skip
    sform = np.array([raw["srow_x"], raw["srow_y"], raw["srow_z"], [0, 0, 0, 1]], np.float64)
    affine = sform if codes[0] > 0 else qform_affine(raw, where)
    affine = affine.astype(np.float32).astype(np.float64)  # as it is written again: NIfTI-1 keeps float32
    try:
        grid = Grid((shape[0], shape[1], shape[2]), affine)
    except InputError as fault:
        raise fault.at(where) from fault
    findings = _odd_units(raw, where)
    if min(codes) > 0:
        findings += _disagreement(grid, raw, where)
    return affine, findings


def _require_spacing(raw: dict[str, Any], where: str) -> None:
    edges = np.array(raw["pixdim"][1:4], np.float64)
    if not (np.isfinite(edges).all() and (edges > 0).all()):
        raise InputError(
            "the voxel size is nonsense", where=where, found=f"pixdim {edges.tolist()}",
            expected="three lengths above 0", remedy="export it again with the scan's voxel size",
        )  # fmt: skip


def _require_millimetres(raw: dict[str, Any], where: str) -> None:
    unit = {1: "metres", 3: "micrometres"}.get(int(raw["xyzt_units"]) & 7)
    if unit:
        raise InputError(
            "the header gives lengths in another unit", where=where, found=unit, expected="millimetres",
            remedy="rescale the affine to millimetres and set the unit code to 2", refused=True,
        )  # fmt: skip


def _odd_units(raw: dict[str, Any], where: str) -> tuple[Finding, ...]:
    if int(raw["xyzt_units"]) & 7 == 2:
        return ()
    sentence = "the header states no unit of length; millimetres are assumed"
    return (Finding(Level.NOTE, "unit_not_stated", where, sentence, "set the unit code to 2 (mm)"),)


def qform_affine(raw: dict[str, Any], where: str) -> NDArray[np.float64]:
    """The affine of a header's quaternion (nifti1.h, METHOD 2).

    Raises
    ------
    InputError
        The quaternion is longer than 1 or not finite.
    """
    b, c, d = (float(raw[f"quatern_{letter}"]) for letter in "bcd")
    rest = 1.0 - (b * b + c * c + d * d)
    if not rest > -1e-5:
        raise InputError(
            "the header's rotation is nonsense", where=where, found=f"quaternion {b:g} {c:g} {d:g}",
            expected="a length of at most 1", remedy="export it again with its orientation",
        )  # fmt: skip
    a = np.sqrt(max(rest, 0.0))
    scale = np.sqrt(a * a + b * b + c * c + d * d)
    a, b, c, d = a / scale, b / scale, c / scale, d / scale
    rotation = np.array(
        [
            [a * a + b * b - c * c - d * d, 2 * (b * c - a * d), 2 * (b * d + a * c)],
            [2 * (b * c + a * d), a * a + c * c - b * b - d * d, 2 * (c * d - a * b)],
            [2 * (b * d - a * c), 2 * (c * d + a * b), a * a + d * d - b * b - c * c],
        ]
    )
    edges = np.array(raw["pixdim"][1:4], np.float64)
    edges[2] *= -1.0 if raw["pixdim"][0] < 0 else 1.0
    affine = np.eye(4)
    affine[:3, :3] = rotation * edges
    affine[:3, 3] = [raw["qoffset_x"], raw["qoffset_y"], raw["qoffset_z"]]
    return affine


def _disagreement(grid: Grid, raw: dict[str, Any], where: str) -> tuple[Finding, ...]:
    """The two orientations of one header, compared at the corners of the grid."""
    try:
        other = Grid(grid.shape, qform_affine(raw, where))
    except InputError as fault:
        sentence = f"the sform is used; the qform beside it cannot be ({fault.what})"
        return (Finding(Level.WARN, "orientations_differ", where, sentence, _ONE_ORIENTATION),)
    corners = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], np.float64)
    corners *= np.array(grid.shape) - 1
    apart = float(np.abs(grid.to_world(corners) - other.to_world(corners)).max())
    if apart <= 0.05 * float(grid.spacing.min()):
        return ()
    sentence = f"sform and qform place the grid up to {apart:.3g} mm apart; the sform is used"
    return (Finding(Level.WARN, "orientations_differ", where, sentence, _ONE_ORIENTATION),)


_ONE_ORIENTATION = "make sure which is right, then write a header that holds only that one"
