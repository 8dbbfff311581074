"""A volume in whatever format it comes: looks at the file, and asks the reader of that format.

A format is a module with `read_labels_with_findings`, `read_image_with_findings` and
`read_volume_with_findings`; here is the one list of them.
"""

from __future__ import annotations

import os
from types import ModuleType

from volmap.io import nifti
from volmap.io.dicom import volumes as dicom
from volmap.io.dicom.opening import is_dicom
from volmap.io.reading import AS_IT_IS, Reading, VolumeKind
from volmap.types.findings import Finding
from volmap.types.volumes import ImageVolume, LabelVolume

PathLike = str | os.PathLike[str]
Findings = tuple[Finding, ...]
_FORMATS = ((is_dicom, dicom),)  # who knows a file by its name or first bytes, and who reads it


def _reader(path: PathLike) -> ModuleType:
    """The module that reads what stands there; NIfTI's says what is wrong with anything else."""
    return next((reader for known, reader in _FORMATS if known(path)), nifti)


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
    return _reader(path).read_labels_with_findings(path, reading)  # type: ignore[no-any-return]


def read_image_with_findings(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[ImageVolume, Findings]:
    """An intensity image, and what is odd about its file.

    Raises
    ------
    InputError
        As `read_image`.
    """
    return _reader(path).read_image_with_findings(path, reading)  # type: ignore[no-any-return]


def read_volume_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS, *, kind: VolumeKind = "either"
) -> tuple[LabelVolume | ImageVolume, Findings]:
    """A volume of either kind, read once.

    Parameters
    ----------
    path : path
    reading : Reading
    kind : 'labels', 'image' or 'either'
        'either' decides by what the file is, or by its values.

    Raises
    ------
    InputError
        As `read_labels` and `read_image`.
    """
    return _reader(path).read_volume_with_findings(path, reading, kind=kind)  # type: ignore[no-any-return]
