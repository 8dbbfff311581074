"""What a NIfTI file says of itself, checked before a voxel is read.

Layout from the official headers nifti1.h (2003-2019) and nifti2.h (2014).
"""

from __future__ import annotations

import gzip
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
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid

DISPVECT = 1006
LARGEST_VOXELS = 2**31
_DEFLATE_AT_BEST = 1032  # zlib cannot pack tighter than about 1032 to 1 (zlib.net, technical details)
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
    slope: float
    inter: float
    affine: NDArray[np.float64]
    findings: tuple[Finding, ...]

    @property
    def n_bytes(self) -> int:
        """Bytes the voxels take."""
        n = self.dtype.itemsize
        for length in self.shape:
            n *= length
        return n


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
        raise _cut_short(where, "packed data that end early") from fault
    except (gzip.BadGzipFile, zlib.error) as fault:
        raise InputError(
            "the packed data are damaged", where=where, remedy="copy or export the file again"
        ) from fault
    except OSError as fault:
        raise cannot_open(path, fault) from fault


def read_header(stream: BinaryIO, file: Path) -> NiftiHeader:
    """Read and check the header.

    Raises
    ------
    InputError
        Not NIfTI, a part of it nonsense, no orientation, or more voxels than the file can hold.
    """
    where = shown_name(file)
    raw = _parsed(stream, where)
    shape = _shape(raw, where)
    dtype = _dtype(raw, where)
    slope, inter = _scaling(raw, where)
    affine, findings = _orientation(raw, shape[:3], where)
    header = NiftiHeader(
        where, shape, int(raw["intent_code"]), dtype, _offset(raw, where), slope, inter, affine, findings
    )
    _require_room(header, stream, file)
    return header


def read_voxels(header: NiftiHeader, stream: BinaryIO, at: int) -> NDArray[Any]:
    """The stored numbers in the header's shape, not scaled.

    Parameters
    ----------
    at : int
        Bytes of the stream read so far.

    Raises
    ------
    InputError
        The file ends before the voxels do.
    """
    _skip(stream, header.offset - at, header.name)
    data = stream.read(header.n_bytes)
    stream.read(1)  # at the end of packed data this checks their checksum
    if len(data) < header.n_bytes:
        raise _cut_short(header.name, f"{len(data)} of {header.n_bytes} bytes of voxels")
    return np.frombuffer(data, header.dtype).reshape(header.shape, order="F")


def _skip(stream: BinaryIO, n: int, where: str) -> None:
    while n > 0:
        got = len(stream.read(min(n, 2**20)))
        if not got:
            raise _cut_short(where, "no voxels at all")
        n -= got


def _cut_short(where: str, found: str) -> InputError:
    return InputError(
        "the file is cut short", where=where, found=found, remedy="copy or export the file again"
    )


def _not_nifti(where: str, found: str) -> InputError:
    return InputError(
        "is not a NIfTI file", where=where, found=found, expected="NIfTI-1 or NIfTI-2 (.nii or .nii.gz)",
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
        raise _cut_short(where, f"{len(block)} of {length} bytes of header")
    magic = block[344:348] if length == 348 else block[4:12]
    if magic[:3] in (b"ni1", b"ni2"):
        raise InputError(
            "the voxels are in a second file (.hdr and .img)", where=where, remedy="join them into one .nii"
        )
    if magic not in (b"n+1\0", b"n+2\0\r\n\x1a\n"):
        raise _not_nifti(where, f"magic {magic!r}")
    order = "<" if int.from_bytes(first, "little") == length else ">"
    structure = kind(block, endianness=order, check=False).structarr
    raw: dict[str, Any] = {key: structure[key].tolist() for key in structure.dtype.names}
    return raw | {"order": order, "length": length}


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
    offset, least = float(raw["vox_offset"]), int(raw["length"]) + 4
    if not (least <= offset < 2**40 and offset == int(offset)):
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


def _require_room(header: NiftiHeader, stream: BinaryIO, file: Path) -> None:
    """Refuse, before any memory is taken, voxels that the file cannot hold."""
    n_voxels = header.n_bytes // header.dtype.itemsize
    size = file.stat().st_size
    packed = isinstance(stream, gzip.GzipFile)
    holds = size * _DEFLATE_AT_BEST if packed else size - header.offset
    if holds < header.n_bytes:
        raise _cut_short(
            header.name, f"{size} bytes, which cannot hold the {n_voxels} voxels the header claims"
        )
    if n_voxels > LARGEST_VOXELS:
        raise InputError(
            "the volume is too large", where=header.name, found=f"{n_voxels} voxels",
            expected=f"at most {LARGEST_VOXELS}", remedy="crop it to the organ, or use larger voxels",
            refused=True,
        )  # fmt: skip
