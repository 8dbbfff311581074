"""The ledger: one SQLite file that says what of a study is done, refused, or still to do.

Only the driver writes it.  Every change is one transaction in write-ahead mode, so that a process that is
killed leaves a ledger that opens and says what was finished.
"""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import sqlite3
import time
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import Any

from volmap.types import InputError

LEDGER, LOCK = "ledger.sqlite", "ledger.lock"
VERSION = 1


class State(StrEnum):
    """Where a job stands."""

    WAITING = "waiting"
    RUNNING = "running"
    DONE = "done"
    REFUSED = "refused"  # its data cannot be used; the sentence says why
    BLOCKED = "blocked"  # something it stands on was refused
    LOST = "lost"  # its worker died too often, or the program failed


SETTLED = (State.DONE, State.REFUSED, State.BLOCKED, State.LOST)


@dataclass(frozen=True)
class Entry:
    """A row of the ledger.

    Parameters
    ----------
    job : str
        Name of the job, such as "map rig-01 v0 v2".
    kind : str
        'scan', 'map', 'mean' and so on.
    subject : str
    key : str
        Digest of everything that decides the result: inputs, settings, version of the program.
    state : State
    sentence : str
        Why it was refused, or what is remarkable.
    output : str
        Where its result lies, relative to the study folder.
    verdict : str
        Of a map's certificate.
    seconds, peak_mb : float
    attempts : int
    """

    job: str
    kind: str
    subject: str
    key: str
    state: State
    sentence: str = ""
    output: str = ""
    verdict: str = ""
    seconds: float = 0.0
    peak_mb: float = 0.0
    attempts: int = 0


_TABLES = """
create table if not exists ledger (version integer not null);
create table if not exists job (
    job text primary key, kind text not null, subject text not null, key text not null, state text not null,
    sentence text not null default '', output text not null default '', verdict text not null default '',
    seconds real not null default 0, peak_mb real not null default 0, attempts integer not null default 0,
    place integer not null);
create index if not exists job_state on job (kind, state, verdict);
create table if not exists told (job text primary key, told text not null);
create table if not exists attempt (
    job text not null, number integer not null, began real not null, ended real, state text not null,
    sentence text not null default '', primary key (job, number));
create table if not exists file (
    path text primary key, size integer not null, changed integer not null, sha256 text not null);
create table if not exists exclusion (
    job text primary key, reason text not null, at real not null);
"""


class Ledger:
    """An open ledger.

    Parameters
    ----------
    folder : Path
        Of the study.
    """

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._base = _connected(folder / LEDGER)

    def close(self) -> None:
        """Let go of the file."""
        self._base.close()

    def plan(self, entries: Iterable[Entry]) -> None:
        """Make the jobs exactly these; one whose key is as it was keeps its state, others wait.

        A job that was running when its driver died waits again; one that is no longer asked for goes.
        """
        with self._base as base:
            before = {
                job: (key, state) for job, key, state in base.execute("select job, key, state from job")
            }
            wanted = []
            for place, entry in enumerate(entries):
                wanted.append((entry.job,))
                key, state = before.get(entry.job, ("", ""))
                if key == entry.key and state not in (State.RUNNING, State.BLOCKED, State.LOST):
                    base.execute("update job set place = ? where job = ?", (place, entry.job))
                    continue
                base.execute(
                    "insert or replace into job (job, kind, subject, key, state, output, attempts, place) "
                    "values (?, ?, ?, ?, ?, ?, 0, ?)",
                    (entry.job, entry.kind, entry.subject, entry.key, State.WAITING, entry.output, place),
                )
            base.execute("create temporary table if not exists wanted (job text primary key)")
            base.execute("delete from wanted")
            base.executemany("insert into wanted values (?)", wanted)
            for table in ("job", "told"):
                base.execute(f"delete from {table} where job not in (select job from wanted)")
            base.execute("update attempt set state = 'died', ended = began where state = 'running'")

    def begin(self, job: str) -> None:
        """A job starts on a worker."""
        with self._base as base:
            number = base.execute("select count(*) from attempt where job = ?", (job,)).fetchone()[0] + 1
            base.execute(
                "insert into attempt (job, number, began, state) values (?, ?, ?, ?)",
                (job, number, time.time(), State.RUNNING),
            )
            base.execute(
                "update job set state = ?, attempts = attempts + 1 where job = ?", (State.RUNNING, job)
            )

    def settle(
        self,
        job: str,
        state: State,
        *,
        sentence: str = "",
        verdict: str = "",
        told: dict[str, Any] | None = None,
        seconds: float = 0.0,
        peak_mb: float = 0.0,
    ) -> None:
        """A job has ended, one way or another.

        Parameters
        ----------
        job : str
        state : State
        sentence, verdict : str
        told : dict
            Plain values of the result (`told` gives them back).
        seconds, peak_mb : float
        """
        with self._base as base:
            base.execute(
                "update job set state = ?, sentence = ?, verdict = ?, seconds = ?, peak_mb = ? where job = ?",
                (state, sentence, verdict, seconds, peak_mb, job),
            )
            text = json.dumps(told or {}, sort_keys=True)
            base.execute("insert or replace into told values (?, ?)", (job, text))
            base.execute(
                "update attempt set state = ?, sentence = ?, ended = ? where job = ? and state = 'running'",
                (state, sentence, time.time(), job),
            )

    def entries(self, kind: str = "") -> list[Entry]:
        """The jobs in the order of the plan, all or of one kind."""
        columns = "job, kind, subject, key, state, sentence, output, verdict, seconds, peak_mb, attempts"
        where = "where kind = ?" if kind else ""
        rows = self._base.execute(
            f"select {columns} from job {where} order by place", (kind,) if kind else ()
        )
        return [
            Entry(job, of_kind, subject, key, State(state), *rest)
            for job, of_kind, subject, key, state, *rest in rows
        ]

    def told(self, job: str) -> dict[str, Any]:
        """What a job's result holds; empty when it has none."""
        row = self._base.execute("select told from told where job = ?", (job,)).fetchone()
        return dict(json.loads(row[0])) if row else {}

    def counts(self) -> dict[str, dict[str, int]]:
        """How many jobs of each kind are in each state."""
        found: dict[str, dict[str, int]] = {}
        for kind, state, count in self._base.execute(
            "select kind, state, count(*) from job group by kind, state order by kind, state"
        ):
            found.setdefault(kind, {})[state] = count
        return found

    def verdicts(self) -> dict[str, int]:
        """How many finished maps have each verdict."""
        return dict(
            self._base.execute(
                "select verdict, count(*) from job where kind = 'map' and state = ? "
                "group by verdict order by verdict",
                (State.DONE,),
            )
        )

    def troubles(self, limit: int = 20) -> list[tuple[str, str, str]]:
        """Jobs that were refused or lost: name, state, sentence."""
        return list(
            self._base.execute(
                "select job, state, sentence from job where state in (?, ?) order by place limit ?",
                (State.REFUSED, State.LOST, limit),
            )
        )

    def exclude(self, job: str, reason: str) -> None:
        """Keep a result out of the statistics, with the reason why; an empty reason takes it back in."""
        with self._base as base:
            if not base.execute("select 1 from job where job = ?", (job,)).fetchone():
                raise InputError("the ledger knows no such job", where=LEDGER, found=job)
            base.execute("delete from exclusion where job = ?", (job,))
            if reason:
                base.execute("insert into exclusion values (?, ?, ?)", (job, reason, time.time()))

    def exclusions(self) -> dict[str, str]:
        """Reasons by job."""
        return dict(self._base.execute("select job, reason from exclusion order by job"))

    def digest_of(self, path: Path) -> str:
        """SHA-256 of a file's bytes, remembered as long as its size and time of change stay."""
        status = path.stat()
        name = os.path.relpath(path, self._folder)  # no path of this machine stays in the ledger
        row = self._base.execute(
            "select sha256 from file where path = ? and size = ? and changed = ?",
            (name, status.st_size, status.st_mtime_ns),
        ).fetchone()
        if row:
            return str(row[0])
        with path.open("rb") as stream:
            found = hashlib.file_digest(stream, "sha256").hexdigest()
        with self._base as base:
            base.execute(
                "insert or replace into file values (?, ?, ?, ?)",
                (name, status.st_size, status.st_mtime_ns, found),
            )
        return found


@contextmanager
def driving(folder: Path) -> Iterator[Ledger]:
    """The ledger, for the one process that drives the study.

    Raises
    ------
    InputError
        Another process drives it; the ledger is damaged or of another version.
    """
    if not folder.is_dir():
        raise InputError("there is no such folder", where=folder.name or str(folder))
    with (folder / LOCK).open("w") as lock:  # the system lets go of it when the process dies
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as fault:
            raise InputError(
                "another process is running this study",
                where=folder.name,
                remedy="wait for it, or stop it first",
                refused=True,
            ) from fault
        ledger = Ledger(folder)
        try:
            yield ledger
        finally:
            ledger.close()


@contextmanager
def reading(folder: Path) -> Iterator[Ledger]:
    """The ledger, to look at; any number of processes may.

    Raises
    ------
    InputError
        No ledger there, or a damaged one.
    """
    if not (folder / LEDGER).is_file():
        raise InputError(
            "holds no ledger",
            where=folder.absolute().name,
            expected=f"a study folder with {LEDGER}",
            remedy="run the study first",
        )
    ledger = Ledger(folder)
    try:
        yield ledger
    finally:
        ledger.close()


def _connected(path: Path) -> sqlite3.Connection:
    try:
        base = sqlite3.connect(path, timeout=30.0)
        base.execute("pragma journal_mode = wal")
        base.execute("pragma synchronous = full")
        base.executescript(_TABLES)
        row = base.execute("select version from ledger").fetchone()
        if row is None:
            with base:
                base.execute("insert into ledger values (?)", (VERSION,))
            row = (VERSION,)
    except sqlite3.DatabaseError as fault:
        raise InputError(
            "is no ledger, or is damaged",
            where=path.name,
            found=str(fault),
            remedy="move it away: the maps stay, and are found again by their names",
        ) from fault
    if row[0] != VERSION:
        raise InputError("is of another version", where=path.name, found=str(row[0]), expected=str(VERSION))
    return base
