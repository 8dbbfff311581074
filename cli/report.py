"""Write the report of a map folder again: one page that opens offline."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console

HELP = "report.html of a map folder"
EXAMPLE = "volmap report map_0_1 --target-image visit1_image.nii.gz"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("folder", type=Path, metavar="DIR", help="map folder")
    parser.add_argument("--source-image", type=Path, metavar="NII", help="intensities behind the cuts")
    parser.add_argument("--target-image", type=Path, metavar="NII", help="intensities behind the cuts")


def run(options: argparse.Namespace, console: Console) -> int:
    """Write the page."""
    from volmap import pipeline

    page = pipeline.report_folder(
        options.folder,
        source_image=options.source_image,
        target_image=options.target_image,
        progress=console.progress,
    )
    console.say(f"wrote {page}")
    console.result({"written": page.name})
    console.end()
    return 0
