"""The nouns of a study: subjects, visits, and what is to be mapped onto what."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path


class Within(StrEnum):
    """What is mapped between the visits of a subject."""

    BASELINE = "baseline"  # every visit from the first one
    SUCCESSIVE = "successive"  # every visit from the one before
    BOTH = "both"  # both of these: loops can be measured


class Between(StrEnum):
    """What the subjects are brought onto."""

    NOTHING = "nothing"
    SUBJECT = "subject"  # a reference subject


@dataclass(frozen=True)
class Visit:
    """One scan of one subject.

    Parameters
    ----------
    name : str
    day : float
        Days since the subject's first visit; no date.
    labels : Path
    image, landmarks : Path, optional
        Landmarks of one name in two visits are one place, and check the map between them.
    """

    name: str
    day: float
    labels: Path
    image: Path | None = None
    landmarks: Path | None = None


@dataclass(frozen=True)
class Subject:
    """One subject with its visits in order of time.

    Parameters
    ----------
    name : str
    visits : tuple of Visit
        Ascending by day.
    group : str
    """

    name: str
    visits: tuple[Visit, ...]
    group: str = ""


@dataclass(frozen=True)
class StudySettings:
    """How every pair of a study is mapped.

    Parameters
    ----------
    edge_mm, uncertainty_mm : float, optional
        As `volmap map` takes them.
    energy : str
    seed : int
    threads : int
        Threads of each worker: part of what makes results repeatable, so it is stated.
    gates : Path, optional
        A gate table of the study's own.
    one_order : bool
        Leave out the solve on the other scan's mesh.
    """

    edge_mm: float | None = None
    uncertainty_mm: float | None = None
    energy: str = "soft-tissue"
    seed: int = 0
    threads: int = 1
    gates: Path | None = None
    one_order: bool = False


@dataclass(frozen=True)
class Study:
    """A study as its file says.

    Parameters
    ----------
    name : str
    file : Path
        The study file; what it names lies relative to its folder.
    subjects : tuple of Subject
        In the order of the file.
    within : Within
    between : Between
    reference : str
        Name of the reference subject, when there is one.
    names : Path, optional
        Table of label names.
    settings : StudySettings
    """

    name: str
    file: Path
    subjects: tuple[Subject, ...]
    within: Within = Within.BASELINE
    between: Between = Between.NOTHING
    reference: str = ""
    names: Path | None = None
    settings: StudySettings = field(default_factory=StudySettings)

    @property
    def folder(self) -> Path:
        """Where the study lives: ledger, maps, tables, report."""
        return self.file.parent

    def subject(self, name: str) -> Subject:
        """The subject of a name."""
        return next(s for s in self.subjects if s.name == name)
