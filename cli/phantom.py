"""Make a gel phantom: synthetic serial scans of a body in a test rig, with known motion."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console
from .usage import UsageError, positive_mm, whole_number

HELP = "synthetic serial scans with known motion"
EXAMPLE = "volmap phantom gel-column --out column"


BROKEN = "broken"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("name", nargs="?", metavar="NAME", help="which phantom")
    parser.add_argument("--list", action="store_true", help="name them all and stop")
    parser.add_argument("--out", type=Path, metavar="DIR", help="folder to write")
    parser.add_argument("--seed", type=whole_number(0), default=0, help="of the noise")
    parser.add_argument(
        "--voxel", type=positive_mm, metavar="MM", help="voxel size instead of the phantom's own"
    )


def run(options: argparse.Namespace, console: Console) -> int:
    """Make one phantom, or list them."""
    import volmap_phantoms as phantoms

    names = dict(phantoms.names()) | {BROKEN: "one bad input per thing that can be wrong with one"}
    if options.list:
        for name, line in names.items():
            console.say(f"{name:16s} {line}")
        console.result({"phantoms": names})
        console.end()
        return 0
    if options.name not in names:
        found = "no NAME is given" if options.name is None else f"there is no phantom {options.name!r}"
        raise UsageError(f"{found}; there are {', '.join(names)}")
    if options.out is None:
        raise UsageError(f"--out DIR is missing; for instance {EXAMPLE}")
    console.progress("phantom", 0, 0, options.name)
    if options.name == BROKEN:
        _write_broken(options.out)
    else:
        phantoms.write(phantoms.make(options.name, seed=options.seed, voxel_mm=options.voxel), options.out)
    written = sorted(p.name for p in options.out.iterdir())
    console.say(f"wrote {options.out}: {', '.join(written)}")
    console.result({"written": written})
    console.end()
    return 0


def _write_broken(out: Path) -> None:
    from volmap_phantoms import broken

    from volmap.io.atomic import whole_folder

    with whole_folder(out) as place:
        broken.make_all(place)
