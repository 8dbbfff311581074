"""What has to be done for a study: jobs, what each stands on, and a digest of all that decides its result."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import asdict, dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

from volmap.study.design import Between, Study, StudySettings, Subject, Visit, Within
from volmap.types import InputError

MAPS = "maps"
FileDigest = Callable[[Path], str]


@dataclass(frozen=True)
class ScanJob:
    """Read and screen one scan."""

    name: str
    subject: str
    key: str
    visit: Visit
    names: Path | None
    needs: tuple[str, ...] = ()
    output: str = ""
    kind: str = "scan"


@dataclass(frozen=True)
class PairJob:
    """Map one scan onto another.

    Parameters
    ----------
    source, target : (str, Visit)
        Subject and visit.
    output : str
        The map folder, relative to the study's; its name ends in the key, so that what stands under it is
        the result of exactly this job.
    """

    name: str
    subject: str
    key: str
    source: tuple[str, Visit]
    target: tuple[str, Visit]
    settings: StudySettings
    names: Path | None
    needs: tuple[str, ...]
    output: str
    kind: str = "map"


Job = ScanJob | PairJob


def jobs_of(study: Study, file_digest: FileDigest, *, version: str) -> tuple[Job, ...]:
    """All jobs, each after those it stands on.

    Parameters
    ----------
    study : Study
    file_digest : callable
        SHA-256 of a file.
    version : str
        Of the program: another one redoes everything.

    Raises
    ------
    InputError
        A file that can no longer be read.
    """
    digests = _Digests(study, file_digest, version)
    scans = [_scan_job(study, s, v, digests) for s in study.subjects for v in s.visits]
    pairs = [_pair_job(study, a, b, digests) for a, b in scan_pairs(study)]
    return (*scans, *pairs)


def scan_pairs(study: Study) -> list[tuple[tuple[str, Visit], tuple[str, Visit]]]:
    """Which scan, of subject and visit, is mapped onto which; in order."""
    found = []
    for subject in study.subjects:
        found += [((subject.name, a), (subject.name, b)) for a, b in pairs_within(subject, study.within)]
    if study.between is Between.SUBJECT:
        reference = study.subject(study.reference)
        found += [
            ((reference.name, reference.visits[0]), (subject.name, subject.visits[0]))
            for subject in study.subjects
            if subject.name != reference.name
        ]
    return found


def pairs_within(subject: Subject, within: Within) -> list[tuple[Visit, Visit]]:
    """Visits of one subject that are mapped onto each other, source first."""
    first, *later = subject.visits
    found = [(first, visit) for visit in later] if within is not Within.SUCCESSIVE else []
    if within is not Within.BASELINE:
        found += [pair for pair in pairwise(subject.visits) if pair not in found]
    return found


def scan_name(subject: str, visit: Visit) -> str:
    """Name of the job that screens a scan."""
    return f"scan {subject} {visit.name}"


def map_name(source: tuple[str, Visit], target: tuple[str, Visit]) -> str:
    """Name of the job that maps a pair."""
    if source[0] == target[0]:
        return f"map {source[0]} {source[1].name} {target[1].name}"
    return f"map {source[0]} {source[1].name} {target[0]} {target[1].name}"


def _scan_job(study: Study, subject: Subject, visit: Visit, digests: _Digests) -> ScanJob:
    key = digests.key("scan", labels=digests.labels(visit), edge_mm=study.settings.edge_mm)
    return ScanJob(scan_name(subject.name, visit), subject.name, key, visit, study.names)


def _pair_job(
    study: Study, source: tuple[str, Visit], target: tuple[str, Visit], digests: _Digests
) -> PairJob:
    key = digests.key(
        "map",
        source=digests.everything(source[1]),
        target=digests.everything(target[1]),
        settings=digests.settings,
    )
    far = "" if source[0] == target[0] else f"{target[0]}-"
    output = f"{MAPS}/{source[0]}/{source[1].name}-to-{far}{target[1].name}.{key[:12]}"
    return PairJob(
        name=map_name(source, target),
        subject=target[0],
        key=key,
        source=source,
        target=target,
        settings=study.settings,
        names=study.names,
        needs=(scan_name(*source), scan_name(*target)),
        output=output,
    )


class _Digests:
    """Digests of what decides a result."""

    def __init__(self, study: Study, file_digest: FileDigest, version: str) -> None:
        self._file = file_digest
        self._version = version
        self._names = self._of(study.names)
        settings = {k: v for k, v in asdict(study.settings).items() if k != "gates"}
        self.settings = settings | {"gates": self._of(study.settings.gates)}

    def _of(self, path: Path | None) -> str:
        if path is None:
            return ""
        try:
            if path.is_dir():
                return self.key(
                    "folder", **{p.name: self._file(p) for p in sorted(path.iterdir()) if p.is_file()}
                )
            return self._file(path)
        except OSError as fault:
            raise InputError("cannot be read", where=path.name, found=str(fault.strerror)) from fault

    def labels(self, visit: Visit) -> list[str]:
        return [self._of(visit.labels), self._names]

    def everything(self, visit: Visit) -> list[str]:
        return [*self.labels(visit), self._of(visit.image), self._of(visit.landmarks)]

    def key(self, kind: str, **parts: Any) -> str:
        text = json.dumps([self._version, kind, parts], sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()
