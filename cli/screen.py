"""Look at label volumes: what is in them, and what would go wrong. Two files are compared as a pair."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .console import Console
from .reading import reading_arguments, reading_of
from .usage import UsageError, positive_mm

if TYPE_CHECKING:
    from volmap.screen import ScreenResult

HELP = "what is in a label volume and what would go wrong"
EXAMPLE = "volmap screen visit0_labels.nii.gz visit1_labels.nii.gz"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument(
        "files", nargs="+", type=Path, metavar="FILE", help="label volumes (NIfTI, NRRD, DICOM)"
    )
    reading_arguments(parser)
    parser.add_argument("--edge", type=positive_mm, metavar="MM", help="mesh edge the volumes are meant for")
    parser.add_argument(
        "--mend",
        type=Path,
        metavar="OUT",
        help="write a mended copy of FILE (cavities filled, specks dropped, padded); list every change",
    )
    parser.add_argument("--overwrite", action="store_true", help="replace OUT when it stands there")


def run(options: argparse.Namespace, console: Console) -> int:
    """Screen; exit status 1 when something cannot be mapped."""
    from volmap import pipeline

    if options.mend is not None:
        return _mend(options, console)
    screened = pipeline.screen_files(
        options.files, reading_of(options), edge_mm=options.edge, progress=console.progress
    )
    for result in screened.results:
        _show(result, console)
    document: dict[str, Any] = {
        "files": [
            result.as_dict()
            | {"identifying_fields": {kind: list(names) for kind, names in told.fields.items()}}
            for result, told in zip(screened.results, screened.identifying, strict=True)
        ]
    }
    if screened.pair is not None:
        document["pair"] = {
            "volume_ratios": dict(screened.pair.volume_ratios),
            "findings": [f.as_dict() for f in screened.pair.comparison],
            "days_apart": screened.days_apart,
        }
        console.say("as a pair")
        for label, ratio in screened.pair.volume_ratios:
            name = screened.pair.source.of_label(label).name
            console.say(f"  {name}: volume ratio {ratio:.3f}")
        for finding in screened.pair.comparison:
            console.say(f"  {finding.line}")
    refusals = screened.refusals
    if refusals:
        others = f" (and {len(refusals) - 1} more, above)" if len(refusals) > 1 else ""
        console.fault(f"cannot be mapped as it is: {refusals[0]}{others}")
    else:
        console.say("can be mapped")
    console.result(document | {"refused": screened.refused})
    console.end()
    return int(screened.refused)


def _show(result: ScreenResult, console: Console) -> None:
    shape = " x ".join(str(n) for n in result.shape)
    spacing = " x ".join(f"{s:g}" for s in result.spacing_mm)
    console.say(
        f"{result.name}: {shape} voxels of {spacing} mm, {result.orientation}, {result.handedness}-handed"
    )
    for entry in result.labels:
        border = f", touches the border ({', '.join(entry.border)})" if entry.border else ""
        beside = ", ".join(f"{label} ({area:.0f} mm2)" for label, area in entry.neighbours) or "none"
        console.say(
            f"  {entry.label} {entry.name}: {entry.volume_mm3:.1f} mm3, pieces {entry.pieces}, "
            f"Euler {entry.euler}, cavities {entry.cavities}, thinnest {entry.thinnest_voxels:.1f} voxels, "
            f"neighbours {beside}{border}"
        )
    for finding in result.findings:
        console.say(f"  {finding.line}")


def _mend(options: argparse.Namespace, console: Console) -> int:
    from volmap import pipeline

    if len(options.files) != 1:
        raise UsageError(f"--mend takes one FILE at a time, not {len(options.files)}")
    mended = pipeline.mend_file(
        options.files[0], options.mend, reading_of(options), overwrite=options.overwrite
    )
    for change in mended.changes:
        console.say(change.sentence)
    many = "1 change" if len(mended.changes) == 1 else f"{len(mended.changes)} changes"
    console.say(f"{many}; wrote {options.mend}")
    console.result({"changes": [change.as_dict() for change in mended.changes], "written": options.mend.name})
    console.end()
    return 0
