"""Files of volumes that are carried: which may come in, and how they go out."""

from __future__ import annotations

from pathlib import Path

from volmap.io.dicom.opening import is_dicom
from volmap.io.dicom.segmentation_writing import write_segmentation
from volmap.io.dicom.uids import uids_of_scan
from volmap.io.nifti import write_image, write_labels
from volmap.pipeline.places import NIFTI
from volmap.types import ImageVolume, InputError, LabelVolume

DICOM = (".dcm",)
COMING_IN = (*NIFTI, *DICOM, ".hdr", ".img", ".nrrd", ".nhdr")


def holds_volume(thing: Path) -> bool:
    """True for a file or folder that may hold a volume, by its name or, for DICOM, by its content."""
    return thing.name.lower().endswith(COMING_IN) or is_dicom(thing)


def require_out(out: Path, thing: LabelVolume | ImageVolume) -> None:
    """Refuse a format that cannot hold the thing, before it is carried.

    Raises
    ------
    InputError
        An image as .dcm.
    """
    if isinstance(thing, ImageVolume) and out.name.lower().endswith(DICOM):
        raise InputError(
            "an image is not written as DICOM",
            where=out.name,
            expected="a name that ends in .nii or .nii.gz",
            remedy="labels can be written as .dcm",
        )


def write_volume(
    out: Path,
    thing: LabelVolume | ImageVolume,
    *,
    scan_sha256: str,
    frame_uid: str | None = None,
    overwrite: bool = False,
) -> None:
    """Write a volume in the format its name asks for.

    Parameters
    ----------
    out : Path
    thing : LabelVolume or ImageVolume
    scan_sha256 : str
        Digest of the scan it has arrived in, which gives a DICOM object its study and frame of reference.
    frame_uid : str, optional
        The frame of reference of the user's own images of that scan.
    overwrite : bool

    Raises
    ------
    InputError
        The place is taken or cannot be written, or the grid cannot be held.
    """
    if isinstance(thing, ImageVolume):
        write_image(out, thing, overwrite=overwrite)
    elif out.name.lower().endswith(DICOM):
        scan = uids_of_scan(scan_sha256, frame_uid=frame_uid)
        write_segmentation(
            out, thing, scan=scan, made_by="Labels carried through a map.", overwrite=overwrite
        )
    else:
        write_labels(out, thing, overwrite=overwrite)
