"""The whole job on a phantom: make it, screen it, map its first visit onto its last, carry its beads."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console

HELP = "the whole job on a phantom"
EXAMPLE = "volmap demo --out volmap-demo"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument(
        "--out", type=Path, default=Path("volmap-demo"), metavar="DIR", help="folder to write"
    )
    parser.add_argument("--overwrite", action="store_true", help="replace what stands there")


def run(options: argparse.Namespace, console: Console) -> int:
    """Run the job and say where to look."""
    import volmap_phantoms as phantoms

    from volmap import pipeline
    from volmap.io.atomic import whole_folder

    from .verdict import show

    with whole_folder(options.out, overwrite=options.overwrite, holding="map_0_3/certificate.json") as place:
        console.progress("phantom", 0, 0, "gel-column")
        phantoms.write(phantoms.make("gel-column"), place / "phantom")
        scans = [place / "phantom" / f"visit{v}_labels.nii.gz" for v in (0, 3)]
        images = [place / "phantom" / f"visit{v}_image.nii.gz" for v in (0, 3)]
        pipeline.screen_files(scans, progress=console.progress)
        folder = pipeline.map_files(
            scans[0],
            scans[1],
            place / "map_0_3",
            pipeline.MapJob(),
            guides=place / "phantom" / "beads_0_to_3.csv",
            source_image=images[0],
            target_image=images[1],
            progress=console.progress,
        )
        pipeline.carry_file(
            place / "phantom" / "beads_visit0.csv", place / "map_0_3", place / "beads_carried_to_visit3.csv"
        )
    failed = show(folder.certificate, console)
    console.say(f"The phantom and the map are in {options.out}.")
    console.say(f"Look at {options.out / 'map_0_3' / 'report.html'} in a browser.")
    console.end()
    return failed
