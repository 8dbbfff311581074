"""Measure a map folder's certificate again, from its files alone, and say where the stored one disagrees."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from pathlib import Path
from typing import Any

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
    second = {"disagreements": list(opinion.disagreements), "not_repeated": list(opinion.not_repeated)}
    second |= {"direction_proofs": list(opinion.proofs)}
    failed = show(opinion.certificate, console, more={"second_opinion": second})
    for sentence in opinion.proofs:
        console.say(f"  direction    {sentence}")
    for name in opinion.not_repeated:
        console.say(f"  not repeated: {name}")
    for sentence in opinion.disagreements:
        console.fault(f"DISAGREES: {options.folder.absolute().name}: {sentence}")
    if opinion.disagreements:
        console.fault(_verdict(len(opinion.disagreements), opinion.certificate.settings, options.gates))
    else:
        console.say("the stored certificate holds")
    console.end()
    return int(failed or bool(opinion.disagreements))


def _verdict(count: int, settings: Mapping[str, Any], gates: Path | None) -> str:
    sentence = f"the stored certificate does not hold: {count} disagreement{'s' if count > 1 else ''}"
    table = settings.get("gates", "built in")
    if gates is None and table != "built in":
        return f"{sentence}; it was made with the gate table {table}: name that with --gates"
    return f"{sentence}; map the pair again"
