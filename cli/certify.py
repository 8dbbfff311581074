"""Measure a map folder's certificate again, from its files alone, and say where the stored one disagrees."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console

HELP = "the certificate again, from the files alone"
EXAMPLE = "volmap certify map_0_1"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("folder", type=Path, metavar="DIR", help="map folder")
    parser.add_argument("--gates", type=Path, metavar="TOML", help="a gate table of your own")


def run(options: argparse.Namespace, console: Console) -> int:
    """Certify again; exit status 1 when a gate fails or the stored certificate does not hold."""
    from volmap import pipeline

    from .verdict import show

    opinion = pipeline.certify_folder(options.folder, gates=options.gates, progress=console.progress)
    failed = show(opinion.certificate, console)
    for name in opinion.not_repeated:
        console.say(f"  not repeated: {name}")
    for sentence in opinion.disagreements:
        console.fault(f"DISAGREES: {options.folder.name}: {sentence}")
    if opinion.disagreements:
        console.fault(f"the stored certificate does not hold: {len(opinion.disagreements)} disagreements")
    else:
        console.say("the stored certificate holds")
    console.end()
    return int(failed or bool(opinion.disagreements))
