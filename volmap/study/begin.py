"""A first study file from a folder of scans, and what had to be guessed."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from volmap.io.atomic import require_place, whole_file
from volmap.study.study_file import SCHEMA
from volmap.types import InputError
from volmap.types.notice import caution

STUDY_FILE = "study.toml"
_VOLUME = re.compile(r"\.(nii|nii\.gz|nrrd|dcm)$", re.IGNORECASE)
_LABELS = re.compile(r"(?:^|[_.-])(?:dseg|labels?|seg|segmentation)(?:[_.-]|$)", re.IGNORECASE)
_BIDS = re.compile(r"^sub-(?P<sub>[A-Za-z0-9]+)(?:_ses-(?P<ses>[A-Za-z0-9]+))?_.*dseg\.nii(?:\.gz)?$")


@dataclass(frozen=True)
class Begun:
    """A study file that was written.

    Parameters
    ----------
    file : Path
    subjects, visits : int
    guesses : tuple of str
        What was guessed, a sentence each.
    """

    file: Path
    subjects: int
    visits: int
    guesses: tuple[str, ...]


@dataclass(frozen=True)
class _Found:
    """A label file, whose it may be, and of which visit."""

    path: Path  # relative to the folder
    subject: str
    visit: str


def begin_study(folder: Path, *, overwrite: bool = False) -> Begun:
    """Look through a folder of scans and write `study.toml` into it.

    BIDS names (`sub-..[_ses-..]_.._dseg.nii.gz`, BIDS 1.11.1) say subject and session.  Of other names the
    folder is taken for the subject, and the order of the names for the order of time.

    Raises
    ------
    InputError
        No folder, no label volumes in it, or a study file that is there already.
    """
    if not folder.is_dir():
        raise InputError("there is no such folder", where=folder.name or str(folder))
    require_place(folder / STUDY_FILE, overwrite=overwrite, folder=False)
    found, guesses = _look(folder)
    if not found:
        raise InputError(
            "holds no label volumes",
            where=folder.absolute().name,
            expected="files such as sub-01_ses-1_dseg.nii.gz, or with `labels` or `seg` in their names",
            remedy="rename them, or write the study file by hand",
        )
    subjects: dict[str, list[_Found]] = {}
    for scan in found:
        subjects.setdefault(scan.subject, []).append(scan)
    with whole_file(folder / STUDY_FILE, overwrite=overwrite) as place:
        place.write_text(_text(folder, subjects, guesses), encoding="utf-8")
    return Begun(folder / STUDY_FILE, len(subjects), len(found), tuple(guesses))


def _look(folder: Path) -> tuple[list[_Found], list[str]]:
    files = sorted(p.relative_to(folder) for p in folder.rglob("*") if _is_labels(p, folder))
    bids = [(path, _BIDS.match(path.name)) for path in files]
    named = [_Found(path, m["sub"], m["ses"] or "1") for path, m in bids if m]
    guesses = []
    if named:
        guesses.append(f"{len(named)} files have BIDS names: subject and session come from them")
    rest = [path for path, match in bids if not match]
    if named and rest:
        guesses.append(f"{len(rest)} more label volumes have no BIDS names and were left out")
    elif rest:
        guesses.append("no BIDS names: a folder is taken for a subject, the order of names for that of time")
        named = [_Found(path, _plain(path.parent.name or folder.absolute().name), "") for path in rest]
    guesses.append("days are counted 0, 1, 2 in the order of the visits: put in the true days")
    return _numbered(named), guesses


def _is_labels(path: Path, folder: Path) -> bool:
    inside = path.relative_to(folder).parts
    if any(part.startswith(".") or part == "maps" for part in inside) or not path.is_file():
        return False
    return bool(_VOLUME.search(path.name)) and bool(_LABELS.search(_VOLUME.sub("", path.name)))


def _plain(text: str) -> str:
    """A name that the study file takes."""
    return re.sub(r"[^A-Za-z0-9._-]+", "-", text).lstrip("._-")[:64] or "subject"


def _numbered(found: Iterable[_Found]) -> list[_Found]:
    """In order of subject and visit, numbers in names as numbers; visits without a name get one."""
    ordered = sorted(found, key=lambda f: (_natural(f.subject), _natural(f.visit), _natural(f.path.name)))
    count: dict[str, int] = {}
    numbered = []
    for scan in ordered:
        number = count.get(scan.subject, 0)
        count[scan.subject] = number + 1
        numbered.append(_Found(scan.path, scan.subject, scan.visit or f"v{number}"))
    return numbered


def _natural(text: str) -> list[tuple[int, str]]:
    return [(int(part), "") if part.isdigit() else (-1, part) for part in re.split(r"(\d+)", text)]


def _text(folder: Path, subjects: dict[str, list[_Found]], guesses: list[str]) -> str:
    lines = [f"# {caution()}", "#", *(f"# guessed: {sentence}" for sentence in guesses), ""]
    lines += [f'schema = "{SCHEMA}"', f'name = "{_plain(folder.absolute().name)}"']
    table = next((name for name in ("labels.tsv", "dseg.tsv") if (folder / name).is_file()), None)
    lines += [f'names = "{table}"'] if table else []
    lines += [
        "",
        "[design]",
        'within = "baseline"   # successive, both',
        'between = "nothing"   # subject',
        "",
    ]
    lines += ["[settings]", "threads = 1", ""]
    for subject, scans in subjects.items():
        lines += ["[[subject]]", f'name = "{subject}"', 'group = ""', ""]
        for day, scan in enumerate(scans):
            lines += ["[[subject.visit]]", f'name = "{scan.visit}"', f"day = {day}"]
            lines += [f'labels = "{_escaped(scan.path.as_posix())}"', ""]
    return "\n".join(lines)


def _escaped(text: str) -> str:
    return text.replace("\\", "\\\\").replace('"', '\\"')
