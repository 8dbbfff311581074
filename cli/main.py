"""The command `volmap`."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from importlib import import_module
from importlib.resources import files

from .console import Console

VERBS = ("screen", "mesh", "map", "certify", "carry", "report", "phantom", "demo")
DONE, REFUSED, USAGE, UNREADABLE, INTERRUPTED = 0, 1, 2, 3, 130


def _parser() -> argparse.ArgumentParser:
    caution = files("volmap_shared").joinpath("caution.txt").read_text(encoding="utf-8").strip()
    parser = argparse.ArgumentParser(
        prog="volmap",
        description="Certified volumetric maps between the insides of segmented organs.",
        epilog="exit status: 0 done; 1 a gate failed or the data were refused; 2 usage; "
        f"3 an input could not be read; 130 interrupted. {caution}",
    )
    parser.add_argument("--version", action="store_true", help="print the version and stop")
    verbs = parser.add_subparsers(dest="verb", metavar="VERB")
    for name in VERBS:
        module = import_module(f".{name}", __package__)
        verb = verbs.add_parser(
            name,
            help=module.HELP,
            description=module.__doc__,
            epilog=f"example: {module.EXAMPLE}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        module.arguments(verb)
        verb.add_argument("--json", action="store_true", help="result as one JSON document on stdout")
        verb.add_argument("--quiet", action="store_true", help="no progress")
        verb.set_defaults(run=module.run)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    parser = _parser()
    options = parser.parse_args(arguments)
    if options.version:
        from importlib.metadata import version

        print(f"volmap {version('volmap')}")
        return DONE
    if options.verb is None:
        parser.print_help()
        return USAGE
    return _run(options)


def _run(options: argparse.Namespace) -> int:
    from volmap.types import InputError

    console = Console(as_json=options.json, quiet=options.quiet)
    try:
        return int(options.run(options, console))
    except InputError as error:
        console.fault(error.sentence)
        return REFUSED if error.refused else UNREADABLE
    except KeyboardInterrupt:
        console.fault("interrupted; nothing was written")
        return INTERRUPTED
    except BrokenPipeError:
        sys.stderr.close()
        return DONE


if __name__ == "__main__":
    sys.exit(main())
