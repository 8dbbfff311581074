"""Send a body round a loop of maps (A to B, B to C, C to A) and measure how far from its start it ends."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console
from .usage import UsageError, whole_number

HELP = "how well maps between three or more visits agree"
EXAMPLE = "volmap loop map_0_1 map_1_2 map_0_2 --out loop.csv"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument(
        "folders",
        type=Path,
        nargs="+",
        metavar="DIR",
        help="map folders in order, ending where they start; each is turned where it runs the other way",
    )
    parser.add_argument("--out", type=Path, metavar="FILE", help="table of all places (.csv or .parquet)")
    parser.add_argument("--overwrite", action="store_true", help="replace a file that stands there")
    parser.add_argument("--seed", type=whole_number(0), default=0, help="of the places spread by volume")


def run(options: argparse.Namespace, console: Console) -> int:
    """Measure one loop."""
    if len(options.folders) < 2:
        raise UsageError("a loop needs at least two map folders")
    if options.overwrite and options.out is None:
        raise UsageError("--overwrite replaces what --out names, and no --out is given")
    from volmap import pipeline

    loop = pipeline.loop_folders(
        options.folders,
        out=options.out,
        seed=options.seed,
        overwrite=options.overwrite,
        progress=console.progress,
    )
    for finding in loop.findings:
        console.say(finding.line)
    console.say(" -> ".join([*(leg.start.name for leg in loop.way.legs), loop.way.end.name]))
    console.say(loop.sentence)
    console.say(pipeline.LOOP_MEANING)
    if options.out:
        console.say(f"wrote {options.out}")
    console.result(loop.as_dict)
    console.end()
    return 0
