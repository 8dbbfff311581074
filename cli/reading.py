"""Options that say how volumes are read where their files leave it open."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from .usage import positive_number, whole_number

if TYPE_CHECKING:
    from volmap.io.reading import Reading


def reading_arguments(parser: argparse.ArgumentParser, *, pair: bool = False) -> None:
    """`--names`, `--threshold`, and `--frame` (for a pair one each, since both may lie in one file)."""
    parser.add_argument("--names", type=Path, metavar="TABLE", help="names of labels (TSV, CSV: index, name)")
    parser.add_argument(
        "--threshold",
        type=positive_number,
        metavar="P",
        help="value from which on a voxel belongs to the label, in the file's own numbers (0.5 of 1)",
    )
    for option in ("--source-frame", "--target-frame") if pair else ("--frame",):
        parser.add_argument(
            option, type=whole_number(0), metavar="N", help="which volume of a file of several, from 0"
        )


def reading_of(options: argparse.Namespace, frame: str = "frame") -> Reading:
    """What the options say; `frame` is the name of the option that counts."""
    from volmap.io.reading import Reading

    return Reading(options.names, getattr(options, frame), options.threshold)
