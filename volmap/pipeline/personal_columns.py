"""Columns of a table that by their headings name a person, a day or a machine: they do not leave."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from volmap.types import Finding, Level, Measurements

# Headings in small letters with nothing between them: whole ones, and beginnings (no source; what PS3.15,
# table E.1-1, would remove, in the words of tables).
WHOLE = ("born", "date", "dateofbirth", "dob", "file", "host", "mail", "mrn", "path", "ssn", "uid", "user")
STEMS = (
    "accession", "address", "birth", "clinic", "device", "doctor", "email", "firstname", "forename",
    "hospital", "hostname", "institut", "insur", "lastname", "operator", "patient", "phone", "physician",
    "scandate", "scanner", "station", "studydate", "surname", "username",
)  # fmt: skip


def without_personal(thing: Any, where: str) -> tuple[Any, tuple[Finding, ...]]:
    """A table without such columns, and a finding that names their headings; anything else as it is.

    Parameters
    ----------
    thing : noun
        Only measurements keep texts.
    where : str
        What the thing is called.
    """
    if not isinstance(thing, Measurements):
        return thing, ()
    personal = [h for h in thing.texts if _names_someone(h)]
    if not personal:
        return thing, ()
    kept = {h: texts for h, texts in thing.texts.items() if h not in personal}
    sentence = (
        f"columns that seem to name a person, a day or a machine were left out: {', '.join(personal)[:200]}"
    )
    remedy = "give a column another heading if it names none"
    finding = Finding(Level.WARN, "personal-left-out", where, sentence, remedy)
    return replace(thing, texts=kept), (finding,)


def _names_someone(heading: str) -> bool:
    letters = "".join(c for c in heading.lower() if c.isalpha())
    return letters in WHOLE or letters.startswith(STEMS)
