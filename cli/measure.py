"""Measure a map: volumes of its labels, or of regions drawn in one scan, their change with its uncertainty,
volume ratios and stretches, over everything and over what is reliable, as a table for statistics."""

from __future__ import annotations

import argparse
import math
from pathlib import Path
from typing import TYPE_CHECKING

from .console import Console
from .reading import reading_arguments, reading_of
from .usage import UsageError

if TYPE_CHECKING:
    from volmap.types import Table

HELP = "a table of volumes, changes, volume ratios and stretches, for statistics"
EXAMPLE = "volmap measure map_0_1 --out measures.csv --mask reliable.nii.gz"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("folder", type=Path, metavar="DIR", help="map folder")
    parser.add_argument("--out", type=Path, required=True, metavar="FILE", help="table, .csv or .parquet")
    parser.add_argument("--regions", type=Path, metavar="FILE", help="label volume of regions")
    parser.add_argument(
        "--belongs-to",
        choices=("source", "target"),
        help="scan the regions were drawn in, where their grid does not tell",
    )
    parser.add_argument(
        "--each",
        choices=("region", "tet", "point"),
        default="region",
        help="what a row is: a region (default), a tet, or a mesh point",
    )
    parser.add_argument("--long", action="store_true", help="a row a region and measure")
    parser.add_argument("--mask", type=Path, metavar="NII", help="also write where the map is reliable")
    reading_arguments(parser)
    parser.add_argument("--overwrite", action="store_true", help="replace files that stand there")


def run(options: argparse.Namespace, console: Console) -> int:
    """Measure; exit status 1 when the map's certificate failed."""
    if options.each != "region" and (options.regions or options.long):
        raise UsageError(f"--each {options.each} goes with neither --regions nor --long")
    if options.belongs_to and not options.regions:
        raise UsageError("--belongs-to says where --regions were drawn, and none are given")
    if not options.regions and any(v is not None for v in (options.names, options.frame, options.threshold)):
        raise UsageError("--names, --frame and --threshold say how --regions are read, and none are given")
    from volmap import pipeline
    from volmap.types import Verdict

    measured = pipeline.measure_files(
        options.folder,
        options.out,
        regions=options.regions,
        belongs_to=options.belongs_to,
        reading=reading_of(options),
        each=options.each,
        long=options.long,
        mask=options.mask,
        overwrite=options.overwrite,
        progress=console.progress,
    )
    for finding in measured.findings:
        console.say(finding.line)
    if options.each == "region" and not options.long:
        for line in _lines(measured.table):
            console.say(line)
    written = [options.out.name, f"{options.out.name}.json", *([options.mask.name] if options.mask else [])]
    console.say(f"wrote {options.out} ({len(measured.table)} rows) and {', '.join(written[1:])}")
    console.result(
        {
            "written": written,
            "rows": len(measured.table),
            "verdict": measured.verdict.value,
            "findings": [f.as_dict() for f in measured.findings],
        }
    )
    console.end()
    return int(measured.verdict is Verdict.FAIL)


def _lines(table: Table) -> list[str]:
    """A line a region: both volumes, the change, the middle volume ratio, the reliable part."""
    lines = []
    for row, name in enumerate(table["name"]):

        def value(header: str, row: int = row) -> float:
            return float(table[header][row])

        off = value("volume_change_uncertainty_percent")
        known = f" +- {off:.2g}" if math.isfinite(off) else ""
        lines.append(
            f"  {name}: {value('volume_source_mm3'):.0f} -> {value('volume_target_mm3'):.0f} mm3 "
            f"({value('volume_change_percent'):+.2f}{known} %), J p1 {value('volume_ratio_p1_1'):.3f}, "
            f"p50 {value('volume_ratio_p50_1'):.3f}, p99 {value('volume_ratio_p99_1'):.3f}, "
            f"{value('reliable_percent'):.1f} % reliable"
        )
    return lines
