"""What goes beside a carried file: through what it came, which way, and how its numbers were made."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from volmap.carry import CarrySettings
from volmap.pipeline.belonging import Side
from volmap.pipeline.places import told_name
from volmap.pipeline.ways import Way
from volmap.types import Finding
from volmap.types.notice import caution


def sidecar_place(out: Path) -> Path:
    """Beside `out`, its whole name and ``.json``: "x.csv" and "x.nii.gz" of one carry do not collide."""
    return out.with_name(out.name + ".json")


def carried_sidecar(
    thing: Path,
    out: Path,
    way: Way,
    settings: CarrySettings,
    findings: Sequence[Finding],
    *,
    facts: Mapping[str, Any],
    belongs_to: Side | None,
) -> dict[str, Any]:
    """The document; names of files and folders only, no paths.  `facts` as in `Carried`."""
    start, end = way.start, way.end
    return {
        "schema": "volmap-carried/1",
        "file": out.name,
        "carried": told_name(thing),
        "from": {"name": start.name, "sha256": start.sha256},
        "to": {"name": end.name, "sha256": end.sha256},
        "through": [
            {
                "map": leg.name,
                "from": leg.start.name,
                "to": leg.end.name,
                "direction": "from TARGET to SOURCE, by the exact inverse"
                if leg.turned
                else "from SOURCE to TARGET",
            }
            for leg in way.legs
        ],
        "how": "by the exact piecewise affine map of each folder in turn; no sampled field between",
        "belongs_to": f"{start.name}, on the word of the user" if belongs_to else start.name,
        "settings": asdict(settings),
        **facts,
        "frame": "NIfTI world, RAS+: x grows to the right, y to the front, z to the head",
        "units": "mm",
        "findings": [finding.as_dict() for finding in findings],
        "notice": caution(),
    }
