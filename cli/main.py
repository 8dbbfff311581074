"""The command `volmap`."""

from __future__ import annotations

import argparse
import io
import os
import sys
from collections.abc import Sequence
from importlib import import_module
from importlib.resources import files
from textwrap import fill

from .console import Console
from .usage import UsageError

VERBS = (
    *("screen", "mesh", "map", "certify", "carry", "loop", "export", "measure"),
    *("report", "study", "phantom", "demo", "guide"),
)
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
            epilog=f"example: {module.EXAMPLE}\n\n{fill(caution, 78)}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        module.arguments(verb)
        verb.add_argument("--json", action="store_true", help="result as one JSON document on stdout")
        verb.add_argument("--quiet", action="store_true", help="no progress")
        verb.set_defaults(run=module.run)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    _accept_any_letter()
    parser = _parser()
    options = parser.parse_args(arguments)
    if options.version:
        from importlib.metadata import version

        print(f"volmap {version('volmap')}")
        return DONE
    if options.verb is None:
        parser.print_help(sys.stderr)
        return USAGE
    return _run(options)


def _run(options: argparse.Namespace) -> int:
    console = Console(as_json=options.json, quiet=options.quiet)
    try:
        status = _settled(options, console)
        sys.stdout.flush()
        return status
    except KeyboardInterrupt:
        console.fault("interrupted; nothing was written")
        return INTERRUPTED
    except BrokenPipeError:  # whoever read stdout has gone; the work is done
        _let_go_of_stdout()
        return DONE


def _settled(options: argparse.Namespace, console: Console) -> int:
    """The exit status of a verb, with one line on stderr for whatever a user can mend."""
    from volmap.types import InputError, UnsaidError

    try:
        return int(options.run(options, console))
    except UnsaidError as error:
        console.fault(f"{error.sentence}; see volmap {options.verb} --help")
        return USAGE
    except UsageError as error:
        console.fault(f"{error}; see volmap {options.verb} --help")
        return USAGE
    except InputError as error:
        console.fault(error.sentence)
        return REFUSED if error.refused else UNREADABLE
    except MemoryError:
        console.fault("the memory of this machine is not enough; crop the volumes or use a longer --edge")
        return REFUSED


def _let_go_of_stdout() -> None:
    """Send what is left in stdout's buffer nowhere, so that the interpreter can end in peace."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _accept_any_letter() -> None:
    """Print names of files in any script on a terminal of any encoding."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


if __name__ == "__main__":
    sys.exit(main())
