"""NIfTI volumes: labels, images and displacement fields.

World coordinates are NIfTI's own: RAS+, mm.  Displacement fields follow DISPVECT of nifti1.h:
``dim = [5, I, J, K, 1, 3, 1, 1]``, the component slowest on disk, ``y = x + u(x)``.
"""

from __future__ import annotations

import gzip
import os
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from volmap.io.atomic import whole_file
from volmap.io.nifti_header import DISPVECT, NiftiHeader, files_of, opened, read_header, read_voxels
from volmap.io.opening import shown_name
from volmap.io.reading import AS_IT_IS, Reading
from volmap.io.stacks import Stack, as_float32, frames_wanted, image_volume, label_volume, scaled
from volmap.types.errors import InputError
from volmap.types.findings import Finding
from volmap.types.grid import Grid
from volmap.types.gridfield import GridField
from volmap.types.notice import short_caution
from volmap.types.volumes import ImageVolume, LabelVolume

PathLike = str | os.PathLike[str]
Choice = Callable[[NiftiHeader], tuple[range, tuple[Finding, ...]]]
_SCANNER = 1  # NIFTI_XFORM_SCANNER_ANAT
_PACKING = 4  # gzip level
_OF_SEVERAL_PARTS = {  # intent codes of nifti1.h whose values are parts of one thing
    1004: "matrices",
    1005: "symmetric matrices",
    DISPVECT: "displacement vectors",
    1007: "vectors",
    1008: "points",
    1010: "quaternions",
    2003: "RGB colours",
    2004: "RGBA colours",
}


def read_labels(path: PathLike, *, names: PathLike | None = None) -> LabelVolume:
    """A segmentation; what `read_labels_with_findings` saw beside it is dropped.

    Parameters
    ----------
    path : path
    names : path, optional
        Table of label names; by default a table of the same name beside the volume, if there is one.

    Raises
    ------
    InputError
        Not readable as NIfTI, or not a segmentation.
    """
    return read_labels_with_findings(path, Reading(None if names is None else Path(names)))[0]


def read_labels_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS
) -> tuple[LabelVolume, tuple[Finding, ...]]:
    """A segmentation, and what is odd about its header (orientations that differ, no unit).

    Raises
    ------
    InputError
        As `read_labels`.
    """
    return label_volume(read_stack(path, reading), path, reading)


def read_image(path: PathLike, *, unit: str = "") -> ImageVolume:
    """An intensity image; NaN is kept.

    Raises
    ------
    InputError
        Not readable as NIfTI, or not one number a voxel.
    """
    return image_volume(read_stack(path), unit=unit)


def read_field(path: PathLike, *, grid_space: str = "source", points_into: str = "target") -> GridField:
    """A displacement field, mm, RAS+ components; NaN where it is not defined.

    Raises
    ------
    InputError
        Not readable as NIfTI, not a DISPVECT field of three components, or infinite or half-defined
        vectors in it.
    """
    with opened(path) as (stream, file):
        header = read_header(stream, file)
        stored = read_voxels(header, stream, file, at=stream.tell())
    shape = header.shape + (1,) * (7 - len(header.shape))
    if header.intent != DISPVECT or shape[3:] != (1, 3, 1, 1):
        raise InputError(
            "is not a displacement field",
            where=header.name,
            found=f"intent {header.intent}, dimensions {' x '.join(map(str, header.shape))}",
            expected="intent 1006 (DISPVECT), dimensions I x J x K x 1 x 3",
        )
    u = as_float32(scaled(stored, header.slope, header.inter))
    if np.isinf(u).any():
        raise InputError("the field holds infinite displacements", where=header.name, refused=True)
    try:
        return GridField(Grid(shape[:3], header.affine), u, grid_space, points_into)  # type: ignore[arg-type]
    except InputError as fault:
        raise fault.at(header.name) from fault


def write_labels(path: PathLike, volume: LabelVolume, *, overwrite: bool = False) -> None:
    """Write a segmentation: uint8 when every label fits, else uint16.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    dtype = np.uint8 if int(volume.labels.max(initial=0)) < 256 else np.uint16
    shape = volume.grid.shape
    write_frames(path, [volume.labels], volume.grid, dimensions=shape, dtype=dtype, overwrite=overwrite)


def write_image(path: PathLike, volume: ImageVolume, *, overwrite: bool = False) -> None:
    """Write an intensity image as float32.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    shape = volume.grid.shape
    write_frames(path, [volume.values], volume.grid, dimensions=shape, dtype=np.float32, overwrite=overwrite)


def write_field(path: PathLike, field: GridField, *, overwrite: bool = False) -> None:
    """Write a displacement field as DISPVECT, float32, slope 1, inter 0.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    write_frames(
        path,
        (field.displacement[..., c] for c in range(3)),
        field.grid,
        dimensions=(*field.grid.shape, 1, 3),
        dtype=np.float32,
        intent=DISPVECT,
        overwrite=overwrite,
    )


def read_stack(path: PathLike, reading: Reading = AS_IT_IS) -> Stack:
    """The numbers of a file, one frame of them or (with a threshold and no frame) all.

    Raises
    ------
    InputError
        Not readable as NIfTI, vectors, several frames and none chosen, or no such frame.
    """
    header, stored, findings = read_frames(path, lambda header: _frames(header, reading))
    values = scaled(stored, header.slope, header.inter)
    return Stack(header.name, values, header.affine, header.findings + findings)


def read_grid(path: PathLike) -> Grid:
    """The voxel grid alone, of the header.

    Raises
    ------
    InputError
        Not readable as NIfTI.
    """
    with opened(files_of(path)[0]) as (stream, file):
        header = read_header(stream, file)
    return Grid((header.shape[0], header.shape[1], header.shape[2]), header.affine)


def read_frames(path: PathLike, choose: Choice) -> tuple[NiftiHeader, NDArray[Any], tuple[Finding, ...]]:
    """A file's header and the stored numbers, not scaled, of some of its frames.

    Parameters
    ----------
    path : path
        A .nii, or either file of a .hdr and .img pair.
    choose : function
        From the header: which frames, and what to say about it; or refuses the file.

    Returns
    -------
    header : NiftiHeader
    stored : (I, J, K, F) array
    findings : tuple of Finding
        Those of `choose`.

    Raises
    ------
    InputError
        Not readable as NIfTI, or refused by `choose`.
    """
    first, second = files_of(path)
    with opened(first) as (stream, file):
        header = read_header(stream, file)
        frames, findings = choose(header)
        if not header.apart:
            stored = read_voxels(header, stream, file, at=stream.tell(), frames=frames)
    if header.apart:
        with opened(second or first) as (stream, file):
            stored = read_voxels(header, stream, file, at=0, frames=frames)
    return header, stored, findings


def _frames(header: NiftiHeader, reading: Reading) -> tuple[range, tuple[Finding, ...]]:
    kind = _OF_SEVERAL_PARTS.get(header.intent, "")
    if kind and header.n_frames > 1:
        raise InputError(
            "is not one number a voxel",
            where=header.name,
            found=kind,
            expected="labels, intensities or probabilities",
            remedy="read vectors and tensors as such, not one component of them",
            refused=True,
        )
    if sum(n > 1 for n in header.shape[3:]) > 1:
        raise InputError(
            "its frames have several axes",
            where=header.name,
            found=" x ".join(map(str, header.shape)),
            expected="at most four dimensions",
            remedy="write the frames that are wanted into a file of their own",
            refused=True,
        )
    return frames_wanted(header.n_frames, reading, header.name)


def write_frames(
    path: PathLike,
    frames: Iterable[NDArray[Any]],
    grid: Grid,
    *,
    dimensions: tuple[int, ...],
    dtype: DTypeLike,
    intent: int = 0,
    intent_p1: float = 0.0,
    overwrite: bool = False,
) -> None:
    """Write numbers frame by frame, so that one frame at a time is in memory.

    Parameters
    ----------
    path : path
    frames : iterable of (I, J, K) arrays
        As many as there are places along the dimensions after the third, in the order they are stored in.
    grid : Grid
    dimensions : tuple of int
        As in the header, the grid's shape first.
    dtype : dtype
    intent, intent_p1 : int, float
        What the numbers are, in codes of nifti1.h.
    overwrite : bool

    Raises
    ------
    InputError
        The place is taken or cannot be written, or the name is none for NIfTI.
    """
    name, kind = Path(path).name, np.dtype(dtype).newbyteorder("<")
    if not name.endswith((".nii", ".nii.gz")):
        raise InputError("is no name for a NIfTI file", where=shown_name(path), expected=".nii or .nii.gz")
    header = _header(dimensions, kind, grid, (intent, intent_p1))
    with whole_file(path, overwrite=overwrite) as temporary, temporary.open("wb") as raw:
        if not name.endswith(".gz"):
            _put(raw, header, frames, kind)
            return
        with gzip.GzipFile(filename="", mode="wb", fileobj=raw, mtime=0, compresslevel=_PACKING) as stream:
            _put(stream, header, frames, kind)


def _put(stream: Any, header: bytes, frames: Iterable[NDArray[Any]], dtype: np.dtype[Any]) -> None:
    stream.write(header)
    for frame in frames:
        stream.write(frame.astype(dtype, copy=False).tobytes(order="F"))


def _header(
    dimensions: tuple[int, ...], dtype: np.dtype[Any], grid: Grid, intent: tuple[int, float]
) -> bytes:
    """The header block and four empty extension bytes."""
    import nibabel as nib

    kind: Any = nib.Nifti1Header if max(dimensions) <= 32767 else nib.Nifti2Header
    header = kind(endianness="<")
    header.set_data_dtype(dtype)
    header.set_data_shape(dimensions)
    header.set_xyzt_units("mm")
    header["scl_slope"], header["scl_inter"] = 1.0, 0.0
    header["intent_code"], header["intent_p1"] = intent
    header["descrip"] = short_caution().encode("ascii", "replace")[:79]
    header["vox_offset"] = 352 if kind is nib.Nifti1Header else 544
    if kind is nib.Nifti1Header:
        header["magic"] = b"n+1"
    header["pixdim"][1:4] = grid.spacing
    _set_orientation(header, grid)
    return bytes(header.binaryblock) + b"\0\0\0\0"


def _set_orientation(header: Any, grid: Grid) -> None:
    """The sform always; the qform when a rotation can say the same."""
    header.set_qform(grid.affine, code=_SCANNER, strip_shears=True)
    apart = np.abs(header.get_qform() - grid.affine)[:3] * [*grid.shape, 1]
    if apart.max() > 0.01 * grid.spacing.min():
        for key in ("qform_code", "quatern_b", "quatern_c", "quatern_d"):
            header[key] = 0
        for key in ("qoffset_x", "qoffset_y", "qoffset_z"):
            header[key] = 0
        header["pixdim"][0] = 1
    header.set_sform(grid.affine, code=_SCANNER)
