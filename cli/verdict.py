"""A certificate on the terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from .console import Console

if TYPE_CHECKING:
    from volmap.types import Certificate


def show(certificate: Certificate, console: Console, *, more: dict[str, Any] | None = None) -> int:
    """Print gates, notes and verdict, or the JSON document (with `more`); returns 1 when a gate failed."""
    from volmap.certify import as_document
    from volmap.types import Verdict

    for gate in certificate.gates:
        console.say(f"  {gate.verdict.value:12s} {gate.name}: {gate.sentence}")
    for note in certificate.notes:
        console.say(f"  {'note':12s} {note}")
    unseen = sum(gate.verdict is Verdict.NOT_ASSESSED for gate in certificate.gates)
    beside = f" ({unseen} of {len(certificate.gates)} gates not assessed)" if unseen else ""
    console.say(f"verdict: {certificate.verdict.value}{beside}. {certificate.status}")
    console.result(as_document(certificate) | (more or {}))
    return int(certificate.verdict is Verdict.FAIL)
