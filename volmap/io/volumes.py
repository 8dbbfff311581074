"""A volume in whatever format it comes: looks at the file, and asks the reader of that format.

A format of plain numbers is a module with `read_stack`; what its numbers are is decided in `stacks`.  DICOM
says itself what its numbers are, so its module has the readers of this one.
"""

from __future__ import annotations

import os
from dataclasses import replace

from volmap.io import nifti, nrrd
from volmap.io.dicom import volumes as dicom
from volmap.io.dicom.opening import is_dicom
from volmap.io.nifti_components import kind_by_intent, read_components
from volmap.io.opening import shown_name
from volmap.io.reading import AS_IT_IS, Reading, VolumeKind
from volmap.io.stacks import Stack, could_be_labels, image_volume, label_volume
from volmap.types.component_volumes import TensorVolume, VectorVolume
from volmap.types.errors import InputError
from volmap.types.findings import Finding
from volmap.types.grid import Grid
from volmap.types.volumes import ImageVolume, LabelVolume

PathLike = str | os.PathLike[str]
Findings = tuple[Finding, ...]


def _stack(path: PathLike, reading: Reading) -> Stack:
    """NIfTI's reader says what is wrong with anything that is no format at all."""
    return nrrd.read_stack(path, reading) if nrrd.is_nrrd(path) else nifti.read_stack(path, reading)


def read_labels(path: PathLike, reading: Reading = AS_IT_IS) -> LabelVolume:
    """A segmentation; what was seen beside it is dropped (`read_labels_with_findings` keeps it).

    Raises
    ------
    InputError
        Not readable, or not a segmentation.
    """
    return read_labels_with_findings(path, reading)[0]


def read_image(path: PathLike, reading: Reading = AS_IT_IS) -> ImageVolume:
    """An intensity image.

    Raises
    ------
    InputError
        Not readable, or not one number a voxel.
    """
    return read_image_with_findings(path, reading)[0]


def read_grid(path: PathLike) -> Grid:
    """Only the voxel grid of a volume, whatever it holds.

    Raises
    ------
    InputError
        Not readable.
    """
    if is_dicom(path):
        return dicom.read_volume_with_findings(path, AS_IT_IS)[0].grid
    if nrrd.is_nrrd(path):
        stack = nrrd.read_stack(path, Reading(frame=0))
        return Grid(stack.shape, stack.affine)
    return nifti.read_grid(path)


def read_labels_with_findings(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[LabelVolume, Findings]:
    """A segmentation, and what is odd about its file.

    Parameters
    ----------
    path : path
    reading : Reading
        What the user says where the file leaves it open.

    Raises
    ------
    InputError
        As `read_labels`.
    """
    if is_dicom(path):
        return dicom.read_labels_with_findings(path, reading)
    return label_volume(_stack(path, reading), path, reading)


def read_image_with_findings(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[ImageVolume, Findings]:
    """An intensity image, and what is odd about its file.

    Raises
    ------
    InputError
        As `read_image`.
    """
    if is_dicom(path):
        return dicom.read_image_with_findings(path, reading)
    stack = _stack(path, replace(reading, threshold=None))
    return image_volume(stack), stack.findings


def read_volume_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS, *, kind: VolumeKind = "either"
) -> tuple[LabelVolume | ImageVolume | VectorVolume | TensorVolume, Findings]:
    """A volume of any kind, read once.

    Parameters
    ----------
    path : path
    reading : Reading
    kind : 'labels', 'image', 'vectors', 'tensors' or 'either'
        'either' decides by what the file says it is, or by its values.

    Raises
    ------
    InputError
        As `read_labels`, `read_image` and `nifti_components.read_components`.
    """
    if kind in ("vectors", "tensors"):
        _require_nifti(path, kind)
        return read_components(path, kind, reading)
    if is_dicom(path):
        return dicom.read_volume_with_findings(path, reading, kind=kind)
    if kind == "image":
        return read_image_with_findings(path, reading)
    by_intent = kind_by_intent(path) if kind == "either" and not nrrd.is_nrrd(path) else None
    if by_intent is not None:
        return read_components(path, by_intent, reading)
    stack = _stack(path, reading)
    if kind == "labels" or reading.threshold is not None or could_be_labels(stack.values[..., 0]):
        return label_volume(stack, path, reading)
    return image_volume(stack), stack.findings


def _require_nifti(path: PathLike, kind: str) -> None:
    if is_dicom(path) or nrrd.is_nrrd(path):
        raise InputError(
            f"{kind} are read from NIfTI only", where=shown_name(path), expected=".nii or .nii.gz",
            remedy="write them as NIfTI of intent 1007 (vectors) or 1005 (symmetric matrices)", refused=True,
        )  # fmt: skip
