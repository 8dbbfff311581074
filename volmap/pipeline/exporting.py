"""A map folder in the standards of others: DICOM, GIFTI, VTK."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from volmap import carry as carrying
from volmap.io.atomic import require_place, whole_file
from volmap.io.dicom.laying import at_right_angles, squared
from volmap.io.dicom.registration import CheckedPoint, write_registration
from volmap.io.dicom.segmentation_writing import Coding, write_segmentation
from volmap.io.dicom.uids import ScanUids, uids_of_scan
from volmap.io.json_documents import json_text
from volmap.io.tables import sidecar_place
from volmap.mapfolder import MapFolder, read_map_folder
from volmap.pipeline.places import require_name
from volmap.types import Finding, Grid, InputError, LabelVolume, Level, Progress, Verdict, silent
from volmap.types.notice import caution

Side = Literal["source", "target"]
Which = Literal["carried", "source", "target"]
Frames = tuple[str, str]
_OTHER: dict[Side, Side] = {"source": "target", "target": "source"}


@dataclass(frozen=True)
class Exported:
    """What was written.

    Parameters
    ----------
    written : tuple of str
        Names of files, without their folder.
    told : mapping
        What they hold, as in the document beside them.
    findings : tuple of Finding
    """

    written: tuple[str, ...]
    told: dict[str, Any]
    findings: tuple[Finding, ...] = ()


def export_registration(
    through: Path,
    out: Path,
    *,
    bring: Side = "source",
    frames: Frames | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> Exported:
    """Write the map as a DICOM Deformable Spatial Registration, with a document beside it.

    Parameters
    ----------
    through : Path
        Map folder.
    out : Path
        Ends in .dcm; the document adds .json.
    bring : 'source' or 'target'
        Whose images are brought into the other's frame of reference.  The field lies on the other's grid.
    frames : (str, str), optional
        Frame of Reference UIDs of the user's own images of SOURCE and of TARGET; new ones otherwise.
    overwrite : bool
    progress : Progress

    Raises
    ------
    InputError
        No map folder, no UID, a place that is taken, or a map that is defined nowhere on the grid.
    """
    require_name(out, (".dcm",))
    beside = _places(out, overwrite)
    folder, scans, findings = _read(through, frames, progress)
    onto = _OTHER[bring]
    grid: Grid = getattr(folder, onto).grid
    if not at_right_angles(grid):
        grid, findings = squared(grid), (*findings, _squared_finding(onto, through))
    progress("sample", 0, 0, f"the field on the grid of {onto}")
    make = carrying.backward_field if bring == "source" else carrying.forward_field
    field = make(folder.map, grid)
    told = carrying.check_point(field)
    if told is None:
        raise InputError(
            f"the map is defined at no voxel of {onto}", where=through.absolute().name, refused=True
        )
    i, j, k = told["voxel"]
    with whole_file(beside, overwrite=overwrite) as place:  # both stand, or neither
        check = write_registration(
            out,
            field,
            registered=scans[onto],
            source=scans[bring],
            check_voxel=(i, j, k),
            roles=(bring.upper(), onto.upper()),
            overwrite=overwrite,
        )
        document = _registration_document(scans, bring, check, told)
        place.write_text(json_text(document), encoding="utf-8")
    return Exported((out.name, beside.name), document, findings)


def export_segmentation(
    through: Path,
    out: Path,
    *,
    which: Which = "carried",
    coding: Coding = "binary",
    frames: Frames | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> Exported:
    """Write labels of a map folder as a DICOM Segmentation, with a document beside it.

    Parameters
    ----------
    through, out, frames, overwrite, progress
        As in `export_registration`.
    which : 'carried', 'source' or 'target'
        SOURCE's labels on TARGET's grid, or the labels of a scan as they were mapped.
    coding : 'binary' or 'labelmap'
    """
    require_name(out, (".dcm",))
    beside = _places(out, overwrite)
    folder, scans, findings = _read(through, frames, progress)
    side: Side = "source" if which == "source" else "target"
    volume: LabelVolume = getattr(folder, which)
    if which == "carried":
        names, codes = dict(folder.source.names), dict(folder.source.codes)
        volume = LabelVolume(volume.grid, volume.labels, names, volume.name, codes)
    made_by = (
        "Labels of SOURCE on TARGET's grid, carried by a map: the label of the tet at each voxel centre."
        if which == "carried"
        else f"Labels of {which.upper()} as they were given to the map."
    )
    progress("write", 0, 0, out.name)
    document = {
        "schema": "volmap-export/1",
        "kind": f"DICOM Segmentation, {coding.upper()}",
        "what": made_by,
        "in_the_frame_of": side.upper(),
        "frame_of_reference": {"uid": scans[side].frame, "origin": scans[side].origin},
        "labels": {str(label): volume.name_of(label) for label in volume.present},
        "units": "mm",
        "notice": caution(),
    }
    with whole_file(beside, overwrite=overwrite) as place:
        place.write_text(json_text(document), encoding="utf-8")
        write_segmentation(out, volume, scan=scans[side], coding=coding, made_by=made_by, overwrite=overwrite)
    return Exported((out.name, beside.name), document, findings)


def _places(out: Path, overwrite: bool) -> Path:
    """The document's place; both are free, or this raises."""
    beside = sidecar_place(out)
    for place in (out, beside):
        require_place(place, overwrite=overwrite, folder=False)
    return beside


def _read(
    through: Path, frames: Frames | None, progress: Progress
) -> tuple[MapFolder, dict[Side, ScanUids], tuple[Finding, ...]]:
    stated = frames or (None, None)
    uids_of_scan("", frame_uid=stated[0]), uids_of_scan("", frame_uid=stated[1])
    progress("read", 0, 0, through.absolute().name)
    folder = read_map_folder(through)
    scans: dict[Side, ScanUids] = {
        "source": uids_of_scan(folder.source.sha256, frame_uid=stated[0]),
        "target": uids_of_scan(folder.target.sha256, frame_uid=stated[1]),
    }
    return folder, scans, verdict_findings(folder, through)


def verdict_findings(folder: MapFolder, through: Path) -> tuple[Finding, ...]:
    """What leaves in another format leaves its certificate behind."""
    verdict = folder.certificate.verdict
    if verdict is not Verdict.FAIL:
        return ()
    failed = ", ".join(g.name for g in folder.certificate.gates if g.verdict is Verdict.FAIL)
    sentence = f"the map's certificate fails ({failed}), and what was written does not say so everywhere"
    remedy = "read certificate.json before anybody uses it"
    return (Finding(Level.WARN, "failed-map", through.absolute().name, sentence, remedy),)


def _squared_finding(onto: Side, through: Path) -> Finding:
    sentence = (
        f"the axes of {onto.upper()}'s grid are not orthogonal, which DICOM cannot hold: the map was sampled "
        "on a grid with right angles that covers it"
    )
    return Finding(Level.NOTE, "grid-squared", through.absolute().name, sentence)


def _registration_document(
    scans: dict[Side, ScanUids], bring: Side, check: CheckedPoint, told: dict[str, Any]
) -> dict[str, Any]:
    a, b = bring.upper(), _OTHER[bring].upper()
    lps = np.array([-1.0, -1.0, 1.0])
    return {
        "schema": "volmap-export/1",
        "kind": "DICOM Deformable Spatial Registration",
        "what": f"brings images of {a} into the frame of reference of {b}",
        "formula": f"X' = X + D(X): X is a point in {b}, D(X) the vector of the grid there (trilinear), X' "
        f"the matching point in {a}; both matrices of the object are the identity",
        "not_for": f"moving points from {a} into {b}: that is the object of the other direction "
        f"(--bring {_OTHER[bring]})",
        "frame": "LPS inside the object, as DICOM has it; RAS+ wherever it says so here",
        "units": "mm",
        "outside": "NaN in all three components: the map is not defined there",
        "frames_of_reference": {
            side.upper(): {"uid": uids.frame, "origin": uids.origin} for side, uids in scans.items()
        },
        "check_point": {
            "voxel": list(check.voxel),
            "registered_lps_mm": list(check.registered_mm),
            "source_lps_mm": list(check.source_mm),
            "registered_ras_mm": (lps * check.registered_mm).tolist(),
            "source_ras_mm": told["y_mm"],
        },
        "notice": caution(),
    }
