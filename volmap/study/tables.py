"""Tables over a whole study, made from the ledger alone: one row a map, one row a map and region."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from volmap.io.tables import write_table
from volmap.study.design import Study, Visit
from volmap.study.ledger import Entry, Ledger, State
from volmap.study.plan import map_name, scan_pairs
from volmap.types import Column, Table

TABLES = "tables"
Pair = tuple[tuple[str, Visit], tuple[str, Visit]]


def write_tables(study: Study, ledger: Ledger) -> tuple[Path, ...]:
    """Write `tables/maps` and `tables/regions`, each as CSV and Parquet with a JSON that says what they hold.

    The same ledger gives the same bytes.  Nothing is left out silently: a map that was refused, failed or was
    excluded keeps its row, and `used` and `reason` say so.

    Raises
    ------
    InputError
        A place that cannot be written.
    """
    rows = _rows(study, ledger)
    tables = {"maps": _maps(study, rows), "regions": _regions(study, rows, ledger)}
    written = []
    for name, table in tables.items():
        for ending in ("csv", "parquet"):
            place = study.folder / TABLES / f"{name}.{ending}"
            place.parent.mkdir(exist_ok=True)
            write_table(place, table, overwrite=True)
            written.append(place)
    return tuple(written)


def _rows(study: Study, ledger: Ledger) -> list[tuple[Pair, Entry, str]]:
    """Each map of the design with its entry, and why it may not be used ("" when it may)."""
    entries = {entry.job: entry for entry in ledger.entries("map")}
    excluded = ledger.exclusions()
    found = []
    for pair in scan_pairs(study):
        entry = entries.get(map_name(*pair))
        if entry is not None:
            found.append((pair, entry, excluded.get(entry.job) or _unfit(entry)))
    return found


def _unfit(entry: Entry) -> str:
    if entry.state is not State.DONE:
        return f"{entry.state}: {entry.sentence}" if entry.sentence else str(entry.state)
    return "a gate of its certificate failed" if entry.verdict == "fail" else ""


def _who(study: Study, pairs: Sequence[Pair]) -> tuple[Column, ...]:
    """Columns that say whose row it is."""
    group = {subject.name: subject.group for subject in study.subjects}
    source, target = [a for a, _ in pairs], [b for _, b in pairs]
    days = [np.array([visit.day for _, visit in side], np.float64) for side in (source, target)]
    return (
        _words("subject", (name for name, _ in target), "subject the map leads to"),
        _words("group", (group[name] for name, _ in target), "group of that subject"),
        _words("source_subject", (name for name, _ in source), "subject the map starts from"),
        _words("source_visit", (visit.name for _, visit in source), "visit the map starts from"),
        _words("target_visit", (visit.name for _, visit in target), "visit the map leads to"),
        Column("source_day", days[0], "days", "days since that subject's first visit"),
        Column("target_day", days[1], "days", "days since that subject's first visit"),
    )


def _words(name: str, values: Iterable[str], meaning: str) -> Column:
    return Column(name, tuple(values), "", meaning)


def _fit(rows: Sequence[tuple[Pair, Entry, str]]) -> tuple[Column, ...]:
    """Columns that say whether a row may be used, and why not."""
    return (
        _words("verdict", (entry.verdict for _, entry, _ in rows), "verdict of the map's certificate"),
        Column("used", np.array([not reason for *_, reason in rows], bool), "", "may go into the statistics"),
        _words("reason", (reason for *_, reason in rows), "why it may not"),
    )


def _maps(study: Study, rows: Sequence[tuple[Pair, Entry, str]]) -> Table:
    columns = (
        *_who(study, [pair for pair, *_ in rows]),
        _words("state", (entry.state for _, entry, _ in rows), "where the job stands"),
        *_fit(rows),
        _words("folder", (entry.output for _, entry, _ in rows), "map folder, from the study's folder"),
    )
    return Table(columns, {"study": study.name, "rows": "one a map of the design"})


def _regions(study: Study, rows: Sequence[tuple[Pair, Entry, str]], ledger: Ledger) -> Table:
    """Rows of all finished maps below each other; the measures are those of `volmap measure`."""
    measured = [
        (row, ledger.told(row[1].job)["regions"]["columns"]) for row in rows if row[1].state is State.DONE
    ]
    long = [row for row, columns in measured for _ in columns[0]["values"]]
    taken = {"verdict"}  # stands among the columns of fitness
    heads: dict[str, dict[str, Any]] = {
        column["name"]: column for _, columns in measured for column in columns if column["name"] not in taken
    }
    values: dict[str, list[Any]] = {name: [] for name in heads}
    for _, columns in measured:
        here = {column["name"]: column["values"] for column in columns}
        for name in heads:
            values[name] += here.get(name, [None] * len(columns[0]["values"]))
    gathered = tuple(
        Column(name, _typed(values[name]), head["unit"], head["meaning"]) for name, head in heads.items()
    )
    columns = (*_who(study, [pair for pair, *_ in long]), *_fit(long), *gathered)
    return Table(columns, {"study": study.name, "rows": "one a finished map and region"})


def _typed(values: list[Any]) -> Any:
    """As `Column` takes them: words, truths, counts, or numbers with NaN for what is not there."""
    if all(isinstance(value, str) for value in values):
        return tuple(values)
    if all(isinstance(value, bool) for value in values):
        return np.array(values, bool)
    if all(isinstance(value, int) for value in values):
        return np.array(values, np.int64)
    return np.array([np.nan if value is None else value for value in values], np.float64)
