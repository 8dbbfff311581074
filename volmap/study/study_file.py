"""The study file: TOML in, a `Study` out, or one sentence that says what is wrong where."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping
from itertools import pairwise
from pathlib import Path
from typing import Any

from volmap.io.opening import all_text, shown_name
from volmap.kernels.energies import ENERGIES
from volmap.study.design import Between, Study, StudySettings, Subject, Visit, Within
from volmap.types import InputError

SCHEMA = "volmap-study/1"
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")


def read_study(path: Path) -> Study:
    """Read and check a study file.

    Files it names must exist; what is in them is found out when the study runs, so that one bad scan does
    not stop the rest.

    Raises
    ------
    InputError
        Not TOML, an unknown or missing entry, a value of the wrong kind, a name that stands twice, a file
        that is missing.
    """
    where = shown_name(path)
    try:
        document = tomllib.loads(all_text(path, limit=2**26))
    except tomllib.TOMLDecodeError as fault:
        raise InputError("is not TOML", where=where, found=str(fault)) from fault
    top = _Entries(document, where)
    schema = top.text("schema")
    if schema != SCHEMA:
        raise InputError("is no study file of this program", where=where, found=schema, expected=SCHEMA)
    folder = path.absolute().parent
    name = top.name("name")
    within, between, reference = _design(top.table("design"))
    settings = _settings(top.table("settings"), folder)
    names = top.file("names", folder)
    subjects = tuple(
        _subject(_Entries(entry, f"{where}, subject {number}"), folder)
        for number, entry in enumerate(top.tables("subject"), start=1)
    )
    top.nothing_left()
    study = Study(name, path.absolute(), subjects, within, between, reference, names, settings)
    _check(study, where)
    return study


def _design(entries: _Entries) -> tuple[Within, Between, str]:
    within = Within(entries.choice("within", tuple(Within), Within.BASELINE))
    between = Between(entries.choice("between", tuple(Between), Between.NOTHING))
    reference = entries.text("reference", default="")
    entries.nothing_left()
    if (between is Between.SUBJECT) != bool(reference):
        raise InputError(
            'a reference subject goes with between = "subject"',
            where=entries.where,
            found=f'between = "{between}", reference = "{reference}"',
        )
    return within, between, reference


def _settings(entries: _Entries, folder: Path) -> StudySettings:
    usual = StudySettings()
    settings = StudySettings(
        edge_mm=entries.positive("edge_mm"),
        uncertainty_mm=entries.positive("uncertainty_mm"),
        energy=entries.choice("energy", tuple(ENERGIES), usual.energy),
        seed=entries.whole("seed", least=0, default=usual.seed),
        threads=entries.whole("threads", least=1, default=usual.threads),
        gates=entries.file("gates", folder),
        one_order=entries.yes("one_order", default=usual.one_order),
    )
    entries.nothing_left()
    return settings


def _subject(entries: _Entries, folder: Path) -> Subject:
    name = entries.name("name")
    group = entries.text("group", default="")
    visits = [
        _visit(_Entries(entry, f"{entries.where}, visit {number}"), folder)
        for number, entry in enumerate(entries.tables("visit"), start=1)
    ]
    entries.nothing_left()
    for earlier, later in pairwise(visits):
        if not earlier.day < later.day:
            raise InputError(
                "visits do not stand in order of time",
                where=f"{entries.where} ({name})",
                found=f"day {earlier.day:g} before day {later.day:g}",
                remedy="order them by day; two visits cannot share a day",
            )
    return Subject(name, tuple(visits), group)


def _visit(entries: _Entries, folder: Path) -> Visit:
    labels = entries.file("labels", folder)
    if labels is None:
        raise InputError("the entry `labels` is missing", where=entries.where)
    visit = Visit(
        name=entries.name("name"),
        day=entries.number("day"),
        labels=labels,
        image=entries.file("image", folder),
        landmarks=entries.file("landmarks", folder),
    )
    entries.nothing_left()
    return visit


def _check(study: Study, where: str) -> None:
    """Names that stand twice, and a reference that is nobody."""
    _once([s.name for s in study.subjects], "subject", where)
    for subject in study.subjects:
        _once([v.name for v in subject.visits], "visit", f"{where}, {subject.name}")
    if study.reference and study.reference not in {s.name for s in study.subjects}:
        raise InputError("the reference is none of the subjects", where=where, found=study.reference)


def _once(names: list[str], what: str, where: str) -> None:
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"a {what} stands twice", where=where, found=name)


class _Entries:
    """The entries of one table, taken one by one; what is left at the end is unknown."""

    def __init__(self, entries: Mapping[str, Any], where: str) -> None:
        self.where = where
        self._left = dict(entries)

    def _take(self, key: str, kind: type | tuple[type, ...], what: str, default: Any = None) -> Any:
        if key not in self._left:
            if default is None:
                raise InputError(f"the entry `{key}` is missing", where=self.where, expected=what)
            return default
        value = self._left.pop(key)
        if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
            raise InputError(
                f"the entry `{key}` is of the wrong kind",
                where=self.where,
                found=repr(value)[:60],
                expected=what,
            )
        return value

    def text(self, key: str, *, default: str | None = None) -> str:
        return str(self._take(key, str, "text in quotes", default))

    def name(self, key: str) -> str:
        """Text that can name a file."""
        text = self.text(key)
        if not _NAME.fullmatch(text):
            raise InputError(
                f"the entry `{key}` cannot name a folder",
                where=self.where,
                found=repr(text)[:80],
                expected="letters, digits, dots, dashes and underscores, at most 64, no dash or dot in front",
            )
        return text

    def number(self, key: str) -> float:
        value = float(self._take(key, (int, float), "a number"))
        if not math.isfinite(value):
            raise InputError(f"the entry `{key}` is not finite", where=self.where, found=str(value))
        return value

    def positive(self, key: str) -> float | None:
        if key not in self._left:
            return None
        value = self.number(key)
        if value <= 0:
            raise InputError(f"the entry `{key}` is not above 0", where=self.where, found=f"{value:g}")
        return value

    def whole(self, key: str, *, least: int, default: int) -> int:
        value = int(self._take(key, int, "a whole number", default))
        if value < least:
            raise InputError(
                f"the entry `{key}` is too small",
                where=self.where,
                found=str(value),
                expected=f"from {least}",
            )
        return value

    def yes(self, key: str, *, default: bool) -> bool:
        return bool(self._take(key, bool, "true or false", default))

    def choice(self, key: str, choices: tuple[str, ...], default: str) -> str:
        value = self.text(key, default=default)
        if value not in choices:
            raise InputError(
                f"the entry `{key}` is none of its choices",
                where=self.where,
                found=repr(value),
                expected=", ".join(choices),
            )
        return value

    def file(self, key: str, folder: Path) -> Path | None:
        """A file or folder beside the study file; None when the entry is not there."""
        if key not in self._left:
            return None
        path = folder / self.text(key)
        if not path.exists():
            raise InputError(
                f"the file that `{key}` names is not there", where=self.where, found=shown_name(path)
            )
        return path

    def table(self, key: str) -> _Entries:
        return _Entries(self._take(key, dict, "a table", {}) or {}, f"{self.where}, {key}")

    def tables(self, key: str) -> list[dict[str, Any]]:
        found: list[dict[str, Any]] = self._take(key, list, f"at least one [[{key}]]")
        if not found or not all(isinstance(entry, dict) for entry in found):
            raise InputError(f"the entry `{key}` holds no tables", where=self.where, expected=f"[[{key}]]")
        return found

    def nothing_left(self) -> None:
        if self._left:
            raise InputError(
                "an entry is not known",
                where=self.where,
                found=", ".join(sorted(self._left)),
                remedy="check its spelling, and the table it stands in",
            )
