"""Carry points, measurements, lines (.csv), labels, images (NIfTI, NRRD, DICOM), meshes or surfaces by a map.

Measurements stand beside name,x_mm,y_mm,z_mm in columns <quantity>_<unit>; vectors as <quantity>_x_<unit>,
_y_ and _z_, symmetric tensors as _xx_ to _zz_.  What becomes of their numbers is for you to say (--rule).
"""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path

from .console import Console
from .reading import reading_arguments, reading_of
from .rules import rule_arguments, rules_of
from .usage import UsageError, uid

HELP = "carry points, labels, images or meshes through a map"
EXAMPLE = "volmap carry beads.csv --through map_0_1 --out beads_in_visit1.csv"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("thing", type=Path, metavar="THING", help="file to carry")
    parser.add_argument(
        "--through",
        type=Path,
        required=True,
        nargs="+",
        metavar="DIR",
        help="map folder; several: one after the other, in the order of the visits; or the file of one field",
    )
    parser.add_argument("--out", type=Path, required=True, metavar="FILE", help="where to write it")
    parser.add_argument(
        "--reverse",
        action="store_true",
        help="from TARGET to SOURCE; of several maps, from the last end to the first start",
    )
    parser.add_argument(
        "--as",
        dest="kind",
        choices=("labels", "image", "vectors", "tensors"),
        default="either",
        help="what a volume holds; default: by its header, or by its values (labels or an image)",
    )
    volume_arguments(parser)
    parser.add_argument(
        "--belongs-to",
        choices=("source", "target"),
        help="whose world THING lies in, where neither its digest nor its voxel grid tells",
    )
    parser.add_argument(
        "--frame-uid",
        type=uid,
        metavar="UID",
        help="of labels written as DICOM: frame of reference of your images of the scan they arrive in",
    )
    rule_arguments(parser)
    parser.add_argument(
        "--vertices-only",
        action="store_true",
        help="of lines, carry the given points alone, without those at which their image bends",
    )
    reading_arguments(parser)
    parser.add_argument("--overwrite", action="store_true", help="replace a file that stands there")


def volume_arguments(parser: argparse.ArgumentParser) -> None:
    """How volumes are carried."""
    parser.add_argument(
        "--labels",
        choices=("nearest", "one-hot", "shares"),
        help="of a label volume: the nearest voxel's label (default), the one with the largest trilinear "
        "indicator, or the one that fills most, with exact shares of all labels in OUT_shares.nii.gz",
    )
    parser.add_argument(
        "--image",
        choices=("linear", "cubic"),
        help="of images, vectors and tensors: trilinear (default) or cubic B-splines",
    )
    parser.add_argument(
        "--onto",
        type=Path,
        metavar="FILE",
        help="voxels a carried volume shall have, in the world it arrives in; default: that scan's",
    )
    parser.add_argument(
        "--axes",
        choices=("world", "lps", "voxels"),
        help="axes the components of vectors and tensors run along: the world's, RAS+ (default), those of "
        "DICOM, or the voxel axes",
    )


def run(options: argparse.Namespace, console: Console) -> int:
    """Carry one thing."""
    from volmap import pipeline
    from volmap.carry import CarrySettings

    if options.frame_uid and options.out.suffix.lower() != ".dcm":
        raise UsageError("--frame-uid belongs to labels written as DICOM (.dcm)")

    findings = pipeline.carry_file(
        options.thing,
        options.through,
        options.out,
        CarrySettings(
            bends=not options.vertices_only,
            rules=rules_of(options),
            labels=options.labels,
            image=options.image,
        ),
        reverse=options.reverse,
        kind=options.kind,
        belongs_to=options.belongs_to,
        frame_uid=options.frame_uid,
        onto=options.onto,
        reading=replace(reading_of(options), axes=options.axes),
        progress=console.progress,
        overwrite=options.overwrite,
    )
    for finding in findings:
        console.say(finding.line)
    console.say(f"wrote {options.out}")
    console.result({"written": options.out.name, "findings": [f.as_dict() for f in findings]})
    console.end()
    return 0
