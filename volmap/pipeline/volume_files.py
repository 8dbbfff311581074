"""Files of volumes that are carried: which may come in, and how they go out."""

from __future__ import annotations

from contextlib import ExitStack
from pathlib import Path
from typing import Any

from volmap.carry import CarrySettings
from volmap.io.atomic import require_place, whole_file
from volmap.io.dicom.opening import is_dicom
from volmap.io.dicom.segmentation_writing import write_segmentation
from volmap.io.dicom.uids import uids_of_scan
from volmap.io.json_documents import json_text
from volmap.io.nifti import write_image, write_labels
from volmap.io.nifti_components import write_shares, write_tensors, write_vectors
from volmap.pipeline.places import NIFTI
from volmap.types import (
    Finding,
    ImageVolume,
    InputError,
    LabelShares,
    LabelVolume,
    Level,
    TensorVolume,
    VectorVolume,
)
from volmap.types.notice import caution

DICOM = (".dcm",)
COMING_IN = (*NIFTI, *DICOM, ".hdr", ".img", ".hdr.gz", ".img.gz", ".nrrd", ".nhdr")
_MANY_LABELS = 64  # without a name: common practice, no source
_OF_NUMBERS = (ImageVolume, VectorVolume, TensorVolume)


def holds_volume(thing: Path) -> bool:
    """True for a file or folder that may hold a volume, by its name or, for DICOM, by its content."""
    return thing.name.lower().endswith(COMING_IN) or is_dicom(thing)


def how_taken(volume: LabelVolume | ImageVolume | VectorVolume | TensorVolume) -> Finding:
    """What a volume was taken for, where the user did not say; that decides how it is carried."""
    remedy, level = "", Level.NOTE
    if isinstance(volume, LabelVolume):
        kind, sentence = "labels", f"its {len(volume.present)} whole numbers were taken for labels"
        remedy = "say --as image if they are not"
        if len(volume.present) > _MANY_LABELS and not volume.names:
            level = Level.WARN
            sentence += ", though they are many and have no names, as grey values of 8 bits would be"
    elif isinstance(volume, ImageVolume):
        kind = "image"
        sentence = "its values are no labels (whole, 0 to 65535, at most 256 of them): an image"
    else:
        kind = "vectors" if isinstance(volume, VectorVolume) else "tensors"
        sentence = f"its header says that it holds {kind.replace('tensors', 'symmetric tensors')}"
    return Finding(level, f"carried-as-{kind}", volume.name, sentence, remedy)


def shares_place(out: Path) -> Path:
    """Where the shares of labels go that are written to `out`."""
    name = out.name
    for ending in (".nii.gz", *NIFTI, *DICOM):
        if name.lower().endswith(ending):
            name = name[: -len(ending)]
            break
    return out.with_name(f"{name}_shares.nii.gz")


def require_out(out: Path, thing: Any, settings: CarrySettings, *, overwrite: bool) -> None:
    """Refuse a format that cannot hold the thing and places that are taken, before it is carried.

    Raises
    ------
    InputError
        Numbers as .dcm; shares of labels where a file stands.
    """
    if isinstance(thing, _OF_NUMBERS) and out.name.lower().endswith(DICOM):
        raise InputError(
            "only labels are written as DICOM",
            where=out.name,
            expected="a name that ends in .nii or .nii.gz",
            remedy="name a NIfTI file",
        )
    if isinstance(thing, LabelVolume) and settings.label_mode == "shares":
        for place in (shares_place(out), _beside(shares_place(out))):
            require_place(place, overwrite=overwrite, folder=False)


def facts_beside(out: Path, thing: Any, onto: Path | None) -> dict[str, Any]:
    """What the document beside a carried volume says of its voxels, and of a second file."""
    facts: dict[str, Any] = {}
    if isinstance(thing, LabelShares):
        facts["shares_file"] = shares_place(out).name
        facts["one_label_a_voxel"] = (
            "the label with the largest share, of equal shares the smaller one; none (0) where what lies "
            "outside all labels is no less"
        )
    if onto is not None and hasattr(thing, "grid"):
        facts["voxel_grid"] = f"of {onto.name}, as the user asked"
    return facts


def write_volume(
    out: Path,
    thing: LabelVolume | LabelShares | ImageVolume | VectorVolume | TensorVolume,
    *,
    scan_sha256: str,
    frame_uid: str | None = None,
    overwrite: bool = False,
) -> None:
    """Write a volume in the format its name asks for; of shares both one label a voxel and the shares.

    Parameters
    ----------
    out : Path
    thing : noun
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
    match thing:
        case ImageVolume():
            write_image(out, thing, overwrite=overwrite)
        case VectorVolume():
            write_vectors(out, thing, overwrite=overwrite)
        case TensorVolume():
            write_tensors(out, thing, overwrite=overwrite)
        case LabelShares():
            labels = LabelVolume(thing.grid, thing.largest(), thing.names, thing.name, thing.codes)
            with ExitStack() as all_or_none:
                _write_shares(all_or_none, out, thing, overwrite)
                write_volume(out, labels, scan_sha256=scan_sha256, frame_uid=frame_uid, overwrite=overwrite)
        case LabelVolume() if out.name.lower().endswith(DICOM):
            scan = uids_of_scan(scan_sha256, frame_uid=frame_uid)
            write_segmentation(
                out, thing, scan=scan, made_by="Labels carried through a map.", overwrite=overwrite
            )
        case _:
            write_labels(out, thing, overwrite=overwrite)


def _write_shares(stack: ExitStack, out: Path, shares: LabelShares, overwrite: bool) -> None:
    """The shares and what their frames are; they stand when the stack closes well."""
    place = shares_place(out)
    frames = [
        {"frame": n, "label": label, "name": shares.name_of(label), "volume_mm3": shares.volume_of(label)}
        for n, label in enumerate(shares.labels)
    ]
    document = {
        "schema": "volmap-label-shares/1",
        "file": place.name,
        "labels_file": out.name,
        "frames": frames,
        "meaning": "for each voxel the part of its volume that a label fills, 0 to 1; what the frames leave "
        "to 1 lies outside all labels",
        "exact_for": "the carried source voxels, taken as boxes and sent through the map's affine pieces, as "
        "far as they lie in the body: no sampling, rounding only (in the file to float32)",
        "volume_mm3": "sum of a label's shares times the volume of a voxel",
        "frame_order": "the fourth dimension, counted from 0",
        "notice": caution(),
    }
    told = stack.enter_context(whole_file(_beside(place), overwrite=overwrite))
    told.write_text(json_text(document), encoding="utf-8")
    room = stack.enter_context(whole_file(place, overwrite=overwrite))
    write_shares(room, shares, overwrite=True)


def _beside(place: Path) -> Path:
    return place.with_name(place.name + ".json")
