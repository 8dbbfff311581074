"""A certificate on the terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from .console import Console

if TYPE_CHECKING:
    from volmap.types import Certificate, Gate


def _giving_way(gate: Gate) -> list[str]:
    """What other tolerances of a given boundary would cost, and the worst places, a line each."""
    if not isinstance(gate.value, dict) or "giving_way" not in gate.value:
        return []
    lines = [
        f"allowed {row['tolerance_mm']:7.3g} mm: leaves it by {row['max_mm']:.3g} mm at most, distortion "
        f"{row['distortion']:.4g}, smallest J {row['smallest_ratio']:.3g}"
        + ("" if row["kept"] else " (not kept)")
        for row in gate.value["giving_way"]
    ]
    spots = [(*place["point_mm"], place["note"]) for place in gate.where]
    return lines + [f"at ({x:.1f}, {y:.1f}, {z:.1f}) mm: {note}" for x, y, z, note in spots]


def show(certificate: Certificate, console: Console, *, more: dict[str, Any] | None = None) -> int:
    """Print gates, notes and verdict, or the JSON document (with `more`); returns 1 when a gate failed."""
    from volmap.certify import as_document
    from volmap.types import Verdict

    for gate in certificate.gates:
        console.say(f"  {gate.verdict.value:12s} {gate.name}: {gate.sentence}")
        for line in _giving_way(gate):
            console.say(f"  {'':12s} {line}")
    for note in certificate.notes:
        console.say(f"  {'note':12s} {note}")
    unseen = sum(gate.verdict is Verdict.NOT_ASSESSED for gate in certificate.gates)
    beside = f" ({unseen} of {len(certificate.gates)} gates not assessed)" if unseen else ""
    console.say(f"verdict: {certificate.verdict.value}{beside}. {certificate.status}")
    console.result(as_document(certificate) | (more or {}))
    return int(certificate.verdict is Verdict.FAIL)
