"""A stored certificate against what the files say now."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from volmap.certify.document import plain
from volmap.types.certificate import Certificate, Gate, Verdict

# Counts must be equal.  Other numbers come from float64 arrays and float32 fields through the same
# arithmetic; summation order and rounding on another machine stay far below these.
RELATIVE, ABSOLUTE = 1e-4, 1e-6


@dataclass(frozen=True)
class Disagreement:
    """One number or word in which a stored certificate is not what its files give.

    Parameters
    ----------
    gate : str
    what : str
        Which part of the gate ("verdict", "value.mean", "fail.max_above").
    stored, recomputed : JSON value
    """

    gate: str
    what: str
    stored: Any
    recomputed: Any

    @property
    def sentence(self) -> str:
        """The disagreement as one line."""
        return f"{self.gate}: {self.what} is stored as {self.stored!r} and recomputed as {self.recomputed!r}"


def compare(stored: Certificate, fresh: Sequence[Gate]) -> list[Disagreement]:
    """Every way in which a stored certificate disagrees with recomputed gates.

    A gate that could not be run again (see `not_repeated`) is not compared.  Verdicts, limits, values
    and the number of places are; whole numbers and words must be equal, other numbers to a relative
    1e-4 or an absolute 1e-6.

    Parameters
    ----------
    stored : Certificate
    fresh : sequence of Gate

    Returns
    -------
    list of Disagreement
        In the order of `fresh`; empty when the certificate holds.
    """
    by_name = {gate.name: gate for gate in stored.gates}
    found: list[Disagreement] = []
    for gate in fresh:
        old = by_name.pop(gate.name, None)
        if old is None:
            found.append(Disagreement(gate.name, "gate", "missing", gate.verdict.value))
        elif gate.verdict is not Verdict.NOT_ASSESSED:
            found += [Disagreement(gate.name, *row) for row in _differences(old, gate)]
    found += [Disagreement(name, "gate", old.verdict.value, "unknown gate") for name, old in by_name.items()]
    return found


def not_repeated(stored: Certificate, fresh: Sequence[Gate]) -> tuple[str, ...]:
    """Gates the stored certificate assessed and the files alone cannot."""
    assessed = {gate.name for gate in stored.gates if gate.verdict is not Verdict.NOT_ASSESSED}
    return tuple(g.name for g in fresh if g.verdict is Verdict.NOT_ASSESSED and g.name in assessed)


def _differences(old: Gate, new: Gate) -> Iterator[tuple[str, Any, Any]]:
    if old.verdict is not new.verdict:
        yield "verdict", old.verdict.value, new.verdict.value
    for part in ("unit", "warn", "fail", "value"):
        yield from unlike(part, plain(getattr(old, part)), plain(getattr(new, part)))
    if len(old.where) != len(new.where):
        yield "where (count)", len(old.where), len(new.where)


def unlike(path: str, old: Any, new: Any) -> Iterator[tuple[str, Any, Any]]:
    """Every leaf in which two plain values differ: its path, the old and the new; as `compare` does."""
    if isinstance(old, dict) and isinstance(new, dict):
        for key in [*old, *(k for k in new if k not in old)]:
            if key not in old or key not in new:
                yield f"{path}.{key}", old.get(key, "missing"), new.get(key, "missing")
            else:
                yield from unlike(f"{path}.{key}", old[key], new[key])
    elif isinstance(old, list) and isinstance(new, list) and len(old) == len(new):
        for i, (a, b) in enumerate(zip(old, new, strict=True)):
            yield from unlike(f"{path}[{i}]", a, b)
    elif not _equal(old, new):
        yield path, old, new


def _equal(old: Any, new: Any) -> bool:
    if isinstance(old, bool) or isinstance(new, bool):
        return old is new
    if isinstance(old, int | float) and isinstance(new, int | float):
        if isinstance(new, int):
            return old == new
        return math.isclose(old, new, rel_tol=RELATIVE, abs_tol=ABSOLUTE)
    return bool(old == new)
