"""NIfTI volumes: labels, images and displacement fields.

World coordinates are NIfTI's own: RAS+, mm.  Displacement fields follow DISPVECT of nifti1.h:
``dim = [5, I, J, K, 1, 3, 1, 1]``, the component slowest on disk, ``y = x + u(x)``.
"""

from __future__ import annotations

import gzip
import os
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.label_names import read_label_names, sibling_names
from volmap.io.nifti_header import DISPVECT, NiftiHeader, opened, read_header, read_voxels
from volmap.io.opening import shown_name
from volmap.io.reading import AS_IT_IS, Reading, VolumeKind
from volmap.types.errors import InputError
from volmap.types.findings import Finding
from volmap.types.grid import Grid
from volmap.types.gridfield import GridField
from volmap.types.notice import short_caution
from volmap.types.volumes import ImageVolume, LabelVolume

PathLike = str | os.PathLike[str]
_SCANNER = 1  # NIFTI_XFORM_SCANNER_ANAT
_PACKING = 4  # gzip level
_MOST_LABELS = 256


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
    header, stored = _read(path)
    labels = whole_labels(_scaled(_one_frame(header, stored, reading.frame), header), header.name)
    return _label_volume(path, header, labels, reading), header.findings


def _label_volume(
    path: PathLike, header: NiftiHeader, labels: NDArray[np.uint16], reading: Reading
) -> LabelVolume:
    table = sibling_names(path) if reading.names is None else read_label_names(reading.names)
    return LabelVolume(Grid(labels.shape, header.affine), labels, table, header.name)


def read_image(path: PathLike, *, unit: str = "") -> ImageVolume:
    """An intensity image; NaN is kept.

    Raises
    ------
    InputError
        Not readable as NIfTI, or not one number a voxel.
    """
    return read_image_with_findings(path, unit=unit)[0]


def read_image_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS, *, unit: str = ""
) -> tuple[ImageVolume, tuple[Finding, ...]]:
    """An intensity image, and what is odd about its header.

    Raises
    ------
    InputError
        As `read_image`.
    """
    header, stored = _read(path)
    values = _as_float32(_scaled(_one_frame(header, stored, reading.frame), header))
    return ImageVolume(Grid(values.shape, header.affine), values, unit, header.name), header.findings


def read_volume_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS, *, kind: VolumeKind = "either"
) -> tuple[LabelVolume | ImageVolume, tuple[Finding, ...]]:
    """A volume of either kind, read once.

    Parameters
    ----------
    path : path
    reading : Reading
    kind : 'labels', 'image' or 'either'
        'either' takes whole numbers from 0 to 65535, at most 256 different ones, for labels.

    Raises
    ------
    InputError
        As `read_labels` and `read_image`.
    """
    header, stored = _read(path)
    values = _scaled(_one_frame(header, stored, reading.frame), header)
    if kind == "labels" or (kind == "either" and _could_be_labels(values)):
        return _label_volume(path, header, whole_labels(values, header.name), reading), header.findings
    image = ImageVolume(Grid(values.shape, header.affine), _as_float32(values), "", header.name)
    return image, header.findings


def _could_be_labels(values: NDArray[Any]) -> bool:
    if values.dtype.kind == "f" and not (np.isfinite(values).all() and (values == np.rint(values)).all()):
        return False
    if not values.size or values.min() < 0 or values.max() > 65535:
        return False
    return bool(np.count_nonzero(np.bincount(values.astype(np.uint16).ravel())) <= _MOST_LABELS)


def read_field(path: PathLike, *, grid_space: str = "source", points_into: str = "target") -> GridField:
    """A displacement field, mm, RAS+ components; NaN where it is not defined.

    Raises
    ------
    InputError
        Not readable as NIfTI, not a DISPVECT field of three components, or infinite or half-defined
        vectors in it.
    """
    header, stored = _read(path)
    shape = header.shape + (1,) * (7 - len(header.shape))
    if header.intent != DISPVECT or shape[3:] != (1, 3, 1, 1):
        raise InputError(
            "is not a displacement field",
            where=header.name,
            found=f"intent {header.intent}, dimensions {' x '.join(map(str, header.shape))}",
            expected="intent 1006 (DISPVECT), dimensions I x J x K x 1 x 3",
        )
    u = _as_float32(_scaled(stored.reshape((*shape[:3], 3), order="F"), header))
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
    _write(path, volume.labels.astype(dtype), volume.grid, intent=0, overwrite=overwrite)


def write_image(path: PathLike, volume: ImageVolume, *, overwrite: bool = False) -> None:
    """Write an intensity image as float32.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    _write(path, volume.values, volume.grid, intent=0, overwrite=overwrite)


def write_field(path: PathLike, field: GridField, *, overwrite: bool = False) -> None:
    """Write a displacement field as DISPVECT, float32, slope 1, inter 0.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    voxels = field.displacement.reshape((*field.grid.shape, 1, 3))
    _write(path, voxels, field.grid, intent=DISPVECT, overwrite=overwrite)


def whole_labels(values: NDArray[Any], name: str) -> NDArray[np.uint16]:
    """Values as labels, or the reason why they are none.

    Parameters
    ----------
    values : array of whole or real numbers
    name : str
        File name for the error.

    Raises
    ------
    InputError
        NaN or infinity, fractions, below 0, above 65535.
    """
    if values.dtype.kind == "f":
        _refuse(not np.isfinite(values).all(), "label values that are not finite (NaN or infinity)", name)
        fractions = values != np.rint(values)
        if fractions.any():
            share = f"fractions in {100 * fractions.mean():.2g} % of the voxels"
            worst = values.flat[np.abs(values - np.rint(values)).argmax()]
            found = f"{share}, {worst:.6g} for one"
            _refuse(True, "label values that are not whole numbers", name, found=found)
    least, most = (int(values.min()), int(values.max())) if values.size else (0, 0)
    _refuse(least < 0, "label values below 0", name, found=str(least))
    _refuse(most > 65535, "label values above 65535", name, found=str(most))
    return values.astype(np.uint16)


def _refuse(fault: bool, what: str, name: str, *, found: str = "") -> None:
    if fault:
        raise InputError(
            f"holds {what}",
            where=name,
            found=found,
            expected="whole numbers from 0 to 65535",
            remedy="give the segmentation itself, not an image; resample labels only by nearest neighbour",
            refused=True,
        )


def _read(path: PathLike) -> tuple[NiftiHeader, NDArray[Any]]:
    with opened(path) as (stream, file):
        header = read_header(stream, file)
        return header, read_voxels(header, stream, stream.tell())


def _one_frame(header: NiftiHeader, stored: NDArray[Any], frame: int | None) -> NDArray[Any]:
    """The one volume of a file, or the one that was asked for; frames count in the order they are stored."""
    frames = stored.reshape((*header.shape[:3], -1), order="F")
    n_frames = frames.shape[3]
    if frame is None and n_frames > 1:
        raise InputError(
            "the file holds more than one volume",
            where=header.name,
            found=" x ".join(map(str, header.shape)),
            expected="three dimensions",
            remedy="say which frame is wanted (--frame N, counted from 0)",
            refused=True,
        )
    if frame is not None and not 0 <= frame < n_frames:
        raise InputError(
            "has no such frame",
            where=header.name,
            found=f"{n_frames} frame{'s' if n_frames > 1 else ''}",
            expected=f"frame {frame}",
            remedy="frames count from 0",
            refused=True,
        )
    return frames[..., frame or 0]


def _scaled(stored: NDArray[Any], header: NiftiHeader) -> NDArray[Any]:
    if (header.slope, header.inter) == (1.0, 0.0):
        return stored
    with np.errstate(all="ignore"):
        return np.asarray(stored.astype(np.float64) * header.slope + header.inter)


def _as_float32(values: NDArray[Any]) -> NDArray[np.float32]:
    with np.errstate(all="ignore"):
        return values.astype(np.float32)


def _write(path: PathLike, voxels: NDArray[Any], grid: Grid, *, intent: int, overwrite: bool) -> None:
    name = Path(path).name
    if not name.endswith((".nii", ".nii.gz")):
        raise InputError("is no name for a NIfTI file", where=shown_name(path), expected=".nii or .nii.gz")
    header = _header(voxels, grid, intent)
    with whole_file(path, overwrite=overwrite) as temporary, temporary.open("wb") as raw:
        if not name.endswith(".gz"):
            _put(raw, header, voxels)
            return
        with gzip.GzipFile(filename="", mode="wb", fileobj=raw, mtime=0, compresslevel=_PACKING) as stream:
            _put(stream, header, voxels)


def _put(stream: Any, header: bytes, voxels: NDArray[Any]) -> None:
    stream.write(header)
    little = voxels.astype(voxels.dtype.newbyteorder("<"), copy=False)
    stream.write(little.tobytes(order="F"))


def _header(voxels: NDArray[Any], grid: Grid, intent: int) -> bytes:
    """The header block and four empty extension bytes."""
    import nibabel as nib

    kind: Any = nib.Nifti1Header if max(voxels.shape) <= 32767 else nib.Nifti2Header
    header = kind(endianness="<")
    header.set_data_dtype(voxels.dtype.newbyteorder("<"))
    header.set_data_shape(voxels.shape)
    header.set_xyzt_units("mm")
    header["scl_slope"], header["scl_inter"] = 1.0, 0.0
    header["intent_code"] = intent
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
