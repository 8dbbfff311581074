"""Running a study: the driver hands jobs to workers, and alone writes the ledger."""

from __future__ import annotations

import importlib.metadata
import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from volmap.study.design import Study
from volmap.study.ledger import Entry, Ledger, State, driving
from volmap.study.plan import Job, jobs_of
from volmap.study.tables import write_tables
from volmap.study.work import Result, perform
from volmap.types import InputError

LOSSES = 2  # a job that took this many workers down with it is given up
Told = Callable[[Entry], None]


@dataclass(frozen=True)
class Crew:
    """Who does the work.

    Parameters
    ----------
    workers : int, optional
        Local processes; by default as many as the threads of each leave room for.
    cluster : str
        Address of a Dask cluster that sees the study folder under the same path; empty for local processes.
    """

    workers: int | None = None
    cluster: str = ""


def run_study(study: Study, crew: Crew, *, told: Told = lambda entry: None) -> dict[str, dict[str, int]]:
    """Do whatever of a study is not done yet.

    Parameters
    ----------
    study : Study
    crew : Crew
    told : callable
        Called with a job's entry whenever its state changes.

    Returns
    -------
    dict
        How many jobs of each kind are in each state.

    Raises
    ------
    InputError
        Another process runs the study, or the cluster cannot be reached.
    """
    with driving(study.folder) as ledger:
        jobs = {job.name: job for job in jobs_of(study, ledger.digest_of, version=program_version())}
        ledger.plan(_entry(job, State.WAITING) for job in jobs.values())
        queue = _Queue(jobs, ledger, study.folder, told)
        if queue.open:
            with _client(study, crew) as client:
                _work_off(queue, client)
        write_tables(study, ledger)
        return ledger.counts()


def program_version() -> str:
    """Of what the results depend on; another one redoes everything."""
    return importlib.metadata.version("volmap")


_DEAD = (State.REFUSED, State.BLOCKED, State.LOST)


def _entry(job: Job, state: State) -> Entry:
    return Entry(job.name, job.kind, job.subject, job.key, state, output=job.output)


class _Queue:
    """What is still to do, and what may be done now."""

    def __init__(self, jobs: dict[str, Job], ledger: Ledger, folder: Path, told: Told) -> None:
        self.folder = folder
        self._jobs, self._ledger, self._told = jobs, ledger, told
        self._states = {entry.job: entry.state for entry in ledger.entries()}

    @property
    def open(self) -> bool:
        """True while something waits or runs."""
        return any(state in (State.WAITING, State.RUNNING) for state in self._states.values())

    def ready(self) -> Iterator[Job]:
        """Jobs that stand on nothing unfinished, each once; those that can never be done are blocked."""
        for name, job in self._jobs.items():
            if self._states[name] is not State.WAITING:
                continue
            below = [self._states[need] for need in job.needs]
            if all(state is State.DONE for state in below):
                self._begin(job)
                yield job
            elif bad := [need for need in job.needs if self._states[need] in _DEAD]:
                why = f"stands on {bad[0]}, which is {self._states[bad[0]]}"
                self.settle(name, State.BLOCKED, Result(), sentence=why)

    def _begin(self, job: Job) -> None:
        self._ledger.begin(job.name)
        self._states[job.name] = State.RUNNING
        self._tell(job.name, Result(), "")

    def settle(self, name: str, state: State, result: Result, *, sentence: str = "") -> None:
        """A job has ended."""
        sentence = sentence or result.refused
        self._ledger.settle(
            name,
            state,
            sentence=sentence,
            verdict=result.verdict,
            told=result.told,
            seconds=result.seconds,
            peak_mb=result.peak_mb,
        )
        self._states[name] = state
        self._tell(name, result, sentence)

    def _tell(self, name: str, result: Result, sentence: str) -> None:
        entry = _entry(self._jobs[name], self._states[name])
        self._told(replace(entry, sentence=sentence, verdict=result.verdict, seconds=result.seconds))


def _work_off(queue: _Queue, client: Any) -> None:
    """Hand out what may be done, take in what is done, until nothing is left."""
    from distributed import as_completed

    running: dict[str, str] = {}
    finished = as_completed()

    def hand_out() -> None:
        for job in queue.ready():
            future = client.submit(perform, job, queue.folder, pure=False, key=f"{job.name}|{job.key[:12]}")
            running[future.key] = job.name
            finished.add(future)

    hand_out()
    for future in finished:
        name = running.pop(future.key)
        fault = future.exception()
        if fault is not None:
            queue.settle(name, State.LOST, Result(), sentence=_lost(fault))
        else:
            result: Result = future.result()
            queue.settle(name, State.REFUSED if result.refused else State.DONE, result)
        future.release()
        hand_out()


def _lost(fault: BaseException) -> str:
    from distributed.scheduler import KilledWorker

    if isinstance(fault, KilledWorker):
        many = f"its worker died {LOSSES + 1} times"
        return f"{many}; the memory may not be enough: use a longer edge, or fewer workers"
    return f"the program failed: {type(fault).__name__}: {fault}"


@contextmanager
def _client(study: Study, crew: Crew) -> Iterator[Any]:
    """A client of the cluster that was named, or of one of local processes, gone when the block ends."""
    import dask
    from distributed import Client, LocalCluster

    with dask.config.set({"distributed.scheduler.allowed-failures": LOSSES}):
        if crew.cluster:
            try:
                client = Client(crew.cluster, timeout="10s")
            except (OSError, ValueError) as fault:
                raise InputError("no cluster answers there", where=crew.cluster, found=str(fault)) from fault
            with client:
                yield client
            return
        threads = study.settings.threads
        workers = crew.workers or max(1, len(os.sched_getaffinity(0)) // threads)
        with (
            LocalCluster(
                n_workers=workers,
                threads_per_worker=1,
                processes=True,
                dashboard_address=None,
                host="127.0.0.1",
            ) as cluster,
            Client(cluster) as client,
        ):
            yield client
