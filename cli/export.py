"""Write a map folder's field, labels, surfaces or solid in a standard that other programs read."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from .console import Console
from .usage import UsageError, uid

if TYPE_CHECKING:
    from volmap.pipeline.exporting import Exported

HELP = "a map folder as DICOM registration or segmentation, GIFTI surfaces, VTK solid"
EXAMPLE = "volmap export map_0_1 --as registration --bring source --out visit0_into_visit1.dcm"
IN_FRAMES = ("registration", "segmentation")
OWN_OPTIONS = {"bring": "registration", "labels": "segmentation", "coding": "segmentation"}


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("folder", type=Path, metavar="DIR", help="map folder")
    parser.add_argument(
        "--as",
        dest="kind",
        required=True,
        choices=("registration", "segmentation", "surfaces", "solid"),
        help="registration: the field (DICOM, .dcm); segmentation: labels (DICOM, .dcm); surfaces: of each "
        "label (a folder of GIFTI); solid: tets in both worlds with stretches and turns (a folder of VTU)",
    )
    parser.add_argument("--out", type=Path, required=True, metavar="PLACE", help="file or folder to write")
    parser.add_argument(
        "--bring",
        choices=("source", "target"),
        help="registration: whose images are brought into the other's frame of reference (default: source)",
    )
    parser.add_argument(
        "--labels",
        choices=("carried", "source", "target"),
        help="segmentation: SOURCE's labels on TARGET's grid, or a scan's own (default: carried)",
    )
    parser.add_argument(
        "--coding",
        choices=("binary", "labelmap"),
        help="segmentation: a bit a label and voxel, or the label itself (default: binary)",
    )
    parser.add_argument(
        "--frames",
        nargs=2,
        type=uid,
        metavar=("SOURCE_UID", "TARGET_UID"),
        help="frames of reference (0020,0052) of your own images of both scans (default: new ones)",
    )
    parser.add_argument("--overwrite", action="store_true", help="replace what stands there")


def run(options: argparse.Namespace, console: Console) -> int:
    """Export one thing."""
    if options.frames and options.kind not in IN_FRAMES:
        raise UsageError("--frames belongs to what DICOM has, not to surfaces or a solid")
    for name, kind in OWN_OPTIONS.items():
        if getattr(options, name) is not None and options.kind != kind:
            raise UsageError(f"--{name} belongs to --as {kind}")
    exported = _exported(options, console)
    for finding in exported.findings:
        console.say(finding.line)
    console.say(f"{exported.told['kind']}: {exported.told['what']}")
    for line in _frames(exported):
        console.say(line)
    console.say(f"wrote {', '.join(exported.written)}")
    findings = [f.as_dict() for f in exported.findings]
    console.result(exported.told | {"written": list(exported.written), "findings": findings})
    console.end()
    return 0


def _exported(options: argparse.Namespace, console: Console) -> Exported:
    from volmap import pipeline

    frames = tuple(options.frames) if options.frames else None
    if options.kind == "registration":
        return pipeline.export_registration(
            options.folder,
            options.out,
            bring=options.bring or "source",
            frames=frames,
            overwrite=options.overwrite,
            progress=console.progress,
        )
    if options.kind in ("surfaces", "solid"):
        shapes = pipeline.export_surfaces if options.kind == "surfaces" else pipeline.export_solid
        return shapes(options.folder, options.out, overwrite=options.overwrite, progress=console.progress)
    return pipeline.export_segmentation(
        options.folder,
        options.out,
        which=options.labels or "carried",
        coding=options.coding or "binary",
        frames=frames,
        overwrite=options.overwrite,
        progress=console.progress,
    )


def _frames(exported: Exported) -> list[str]:
    """Whether the frames of reference are the user's or new."""
    told = exported.told.get("frames_of_reference", {})
    if "frame_of_reference" in exported.told:
        told = {exported.told["in_the_frame_of"]: exported.told["frame_of_reference"]}
    return [
        f"frame of reference of {side}: {frame['uid']} ({frame['origin']})" for side, frame in told.items()
    ]
