"""What goes beside a carried file: through what it came, which way, and how its numbers were made."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from volmap.carry import CarrySettings
from volmap.pipeline.belonging import Side
from volmap.pipeline.places import told_name
from volmap.types import Finding
from volmap.types.notice import caution


def carried_sidecar(
    thing: Path,
    out: Path,
    told: Mapping[str, Any],
    settings: CarrySettings,
    findings: Sequence[Finding],
    *,
    facts: Mapping[str, Any],
    belongs_to: Side | None,
) -> dict[str, Any]:
    """The document, names only, no paths; `told` is that of the way, `facts` those of `Carried`."""
    start = told["from"]["name"]
    return {
        "schema": "volmap-carried/1",
        "file": out.name,
        "carried": told_name(thing),
        **told,
        "belongs_to": f"{start}, on the word of the user" if belongs_to else start,
        "settings": asdict(settings),
        **facts,
        "frame": "NIfTI world, RAS+: x grows to the right, y to the front, z to the head",
        "units": "mm",
        "findings": [finding.as_dict() for finding in findings],
        "notice": caution(),
    }
