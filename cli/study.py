"""Many scans of many subjects: begin a study, run it, see where it stands, keep a map out with a reason."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from .console import Console
from .usage import UsageError, whole_number

if TYPE_CHECKING:
    from volmap.study.ledger import Entry

HELP = "many scans, many subjects"
EXAMPLE = "volmap study run scans --workers 2"
OWN_OPTIONS = {
    "workers": "run",
    "cluster": "run",
    "overwrite": "begin",
    "job": "exclude",
    "reason": "exclude",
}


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument(
        "step",
        choices=("begin", "run", "status", "exclude"),
        help="begin: write study.toml from a folder of scans and say what was guessed; run: do what is not "
        "done yet, may be stopped and run again at any time; status: where it stands; exclude: keep a map "
        "out of the statistics, or take it back in",
    )
    parser.add_argument("folder", type=Path, metavar="FOLDER", help="folder of the study")
    parser.add_argument("--overwrite", action="store_true", help="begin: replace a study file")
    parser.add_argument(
        "--workers", type=whole_number(1), metavar="N", help="run: local processes (default: all cores)"
    )
    parser.add_argument("--cluster", metavar="ADDRESS", help="run: a Dask cluster, tcp://host:port")
    parser.add_argument("--job", help='exclude: as status names it, such as "map rig-01 v0 v2"')
    parser.add_argument("--reason", metavar="TEXT", help="exclude: why; without one it is taken back in")


def run(options: argparse.Namespace, console: Console) -> int:
    """One step of a study; exit status 1 when something in it was refused or lost."""
    for name, step in OWN_OPTIONS.items():
        if getattr(options, name) and options.step != step:
            raise UsageError(f"--{name} belongs to volmap study {step}")
    steps = {"begin": _begin, "run": _run, "status": _status, "exclude": _exclude}
    return steps[options.step](options, console)


def _begin(options: argparse.Namespace, console: Console) -> int:
    from volmap.study.begin import begin_study

    begun = begin_study(options.folder, overwrite=options.overwrite)
    console.say(f"wrote {begun.file.name}: {begun.subjects} subjects, {begun.visits} scans")
    for sentence in begun.guesses:
        console.say(f"  guessed: {sentence}")
    console.say("look through it, then: volmap study run")
    console.result({"subjects": begun.subjects, "scans": begun.visits, "guesses": list(begun.guesses)})
    console.end()
    return 0


def _run(options: argparse.Namespace, console: Console) -> int:
    from volmap.study.begin import STUDY_FILE
    from volmap.study.run import Crew, run_study
    from volmap.study.study_file import read_study

    study = read_study(options.folder / STUDY_FILE)
    run_study(study, Crew(options.workers, options.cluster or ""), told=_teller(console))
    return _status(options, console)


def _teller(console: Console) -> Callable[[Entry], None]:
    def told(entry: Entry) -> None:
        verdict = f" ({entry.verdict})" if entry.verdict else ""
        detail = f": {entry.sentence}" if entry.sentence else verdict
        console.progress(entry.state, 0, 0, f"{entry.job}{detail}")

    return told


def _status(options: argparse.Namespace, console: Console) -> int:
    """Show where a study stands."""
    from volmap.study.ledger import reading

    with reading(options.folder) as ledger:
        counts, verdicts = ledger.counts(), ledger.verdicts()
        troubles, excluded = ledger.troubles(), ledger.exclusions()
    for kind, states in counts.items():
        console.say(f"{kind}s: " + ", ".join(f"{count} {state}" for state, count in states.items()))
    if verdicts:
        console.say("verdicts: " + ", ".join(f"{count} {verdict}" for verdict, count in verdicts.items()))
    for job, state, sentence in troubles:
        console.say(f"  {job}: {state}: {sentence}")
    for job, reason in excluded.items():
        console.say(f"  {job}: excluded: {reason}")
    console.result(
        {
            "counts": counts,
            "verdicts": verdicts,
            "troubles": [{"job": job, "state": state, "sentence": text} for job, state, text in troubles],
            "excluded": excluded,
        }
    )
    console.end()
    return int(bool(troubles))


def _exclude(options: argparse.Namespace, console: Console) -> int:
    from volmap.study.begin import STUDY_FILE
    from volmap.study.ledger import driving, reading
    from volmap.study.study_file import read_study
    from volmap.study.tables import write_tables

    if not options.job:
        raise UsageError("exclude needs --job, as volmap study status names it")
    with reading(options.folder):
        pass  # a folder without a ledger stays as it is
    study = read_study(options.folder / STUDY_FILE)
    with driving(options.folder) as ledger:
        ledger.exclude(options.job, options.reason or "")
        write_tables(study, ledger)
    console.say(f"{options.job}: " + ("excluded" if options.reason else "taken back in"))
    console.result({"job": options.job, "reason": options.reason or ""})
    console.end()
    return 0
