"""A DICOM file or folder as a volume: a segmentation object as labels, images as intensities."""

from __future__ import annotations

from pathlib import Path

from volmap.io.dicom.opening import PathLike, odd_values, parsed
from volmap.io.dicom.segmentation_reading import holds_segmentation, read_segmentation
from volmap.io.dicom.series import image_files, read_series
from volmap.io.opening import shown_name
from volmap.io.reading import AS_IT_IS, Reading, VolumeKind
from volmap.types.errors import InputError
from volmap.types.findings import Finding
from volmap.types.volumes import ImageVolume, LabelVolume

Findings = tuple[Finding, ...]


def read_labels_with_findings(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[LabelVolume, Findings]:
    """A segmentation object, or the only file of a folder.

    Raises
    ------
    InputError
        As `read_segmentation`.
    """
    file = _only_file(Path(path))
    if file is None:
        raise InputError(
            "holds more than one DICOM file", where=shown_name(Path(path).absolute()),
            expected="a segmentation object", remedy="name the file of the segmentation", refused=True,
        )  # fmt: skip
    return read_segmentation(file, reading)


def read_image_with_findings(path: PathLike, reading: Reading = AS_IT_IS) -> tuple[ImageVolume, Findings]:
    """The images of a folder or a file.

    Raises
    ------
    InputError
        As `read_series`; or a segmentation, or a frame asked for.
    """
    file, where = _only_file(Path(path)), shown_name(path)
    if file is not None and _is_segmentation(file):
        raise InputError(
            "is a segmentation", where=where, expected="intensities", remedy="give the images themselves",
            refused=True,
        )  # fmt: skip
    if reading.frame is not None:
        raise InputError(
            "DICOM images are read as one volume", where=where, found=f"frame {reading.frame} asked for",
            remedy="leave out the frame, and give the images of one time alone", refused=True,
        )  # fmt: skip
    return read_series(path)


def read_volume_with_findings(
    path: PathLike, reading: Reading = AS_IT_IS, *, kind: VolumeKind = "either"
) -> tuple[LabelVolume | ImageVolume, Findings]:
    """A volume of either kind; 'either' goes by what the objects are, never by their values.

    Raises
    ------
    InputError
        As `read_segmentation` and `read_series`.
    """
    if kind == "labels":
        return read_labels_with_findings(path, reading)
    file = _only_file(Path(path))
    if kind == "either" and file is not None and _is_segmentation(file):
        return read_segmentation(file, reading)
    return read_image_with_findings(path, reading)


def _is_segmentation(file: Path) -> bool:
    with odd_values(file.name):  # what is odd is said by the reader
        return holds_segmentation(parsed(file, pixels=False), shown_name(file))


def _only_file(path: Path) -> Path | None:
    if not path.is_dir():
        return path
    files, _ = image_files(path)
    return files[0] if len(files) == 1 else None
