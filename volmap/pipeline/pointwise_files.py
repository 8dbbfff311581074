"""Files of things that are carried point by point: which noun is in which, read and written."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from volmap.io.csv_columns import read_header
from volmap.io.json_documents import read_json
from volmap.io.landmarks import OPTIONAL_COLUMNS, POINT_COLUMNS, read_landmarks, write_landmarks
from volmap.io.measurements import quantity_columns, read_measurements, write_measurements
from volmap.io.mesh_fields import (
    SURFACE_OUT,
    read_mesh_fields,
    require_fitting,
    rules_as_before,
    write_mesh_fields,
)
from volmap.io.meshes import MESH_ENDINGS
from volmap.io.opening import shown_name
from volmap.io.polylines import LINE_COLUMNS, holds_lines, read_polylines, write_polylines
from volmap.pipeline.places import require_name
from volmap.types import Finding, Landmarks, Measurements, MeshFields, Polylines, Rule, Rules

_OUT = {".csv": (".csv", ".vtp", ".parquet"), ".vtu": (".vtu",), ".vtp": (".csv", *SURFACE_OUT),
        ".vtk": (".csv", ".vtu", *SURFACE_OUT)}  # fmt: skip
ENDINGS = tuple(dict.fromkeys((".csv", *MESH_ENDINGS)))


def endings_out(path: Path) -> tuple[str, ...]:
    """How what comes out of such a file may be called."""
    return _OUT.get(path.suffix.lower(), (".vtu", *SURFACE_OUT))


def read_pointwise(path: Path, rules: Rules) -> tuple[Any, tuple[Finding, ...]]:
    """Landmarks, measurements, lines or a mesh.

    Parameters
    ----------
    path : Path
    rules : Rules
        What the user said of quantities.  Where nothing was said, rules in the document beside a carried
        table hold on.

    Raises
    ------
    InputError
        A file that cannot be read, or quantities nobody says a rule for.
    """
    if path.suffix.lower() != ".csv":
        if path.suffix.lower() in (".vtp", ".vtk") and holds_lines(path):
            rules.require_known((), shown_name(path))
            return read_polylines(path)
        return read_mesh_fields(path, rules, earlier=_rules_beside(path))
    header = read_header(path)
    if header[0] == LINE_COLUMNS[0]:
        rules.require_known((), shown_name(path))
        return read_polylines(path)
    if header[:4] == POINT_COLUMNS and not set(header[4:]) <= set(OPTIONAL_COLUMNS):
        rules, findings = _with_earlier(rules, path)
        return read_measurements(path, rules), findings
    rules.require_known((), shown_name(path))
    return read_landmarks(path), ()


def require_holding(out: Path, thing: Any) -> None:
    """Refuse a name of a format that cannot hold what comes out, before the work.

    Raises
    ------
    InputError
    """
    if isinstance(thing, MeshFields):
        require_fitting(out, thing)
    elif isinstance(thing, Polylines):
        require_name(out, (".csv", ".vtp"))
    elif isinstance(thing, Measurements):
        require_name(out, (".csv", ".parquet"))
    elif isinstance(thing, Landmarks):
        require_name(out, (".csv",))


def write_pointwise(out: Path, thing: Any, *, overwrite: bool = False) -> bool:
    """Write such a thing; False when it is of another kind.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    match thing:
        case Landmarks():
            write_landmarks(out, thing, overwrite=overwrite)
        case Polylines():
            write_polylines(out, thing, overwrite=overwrite)
        case Measurements():
            write_measurements(out, thing, overwrite=overwrite)
        case MeshFields():
            write_mesh_fields(out, thing, overwrite=overwrite)
        case _:
            return False
    return True


def _with_earlier(rules: Rules, path: Path) -> tuple[Rules, tuple[Finding, ...]]:
    """The user's rules, and below them those by which a carried table was made."""
    earlier = _rules_beside(path)
    groups, _ = quantity_columns(read_header(path), shown_name(path))
    taken = {g.name: earlier[g.name] for g in groups if g.name in earlier and not rules.of(g.name, g.rank)}
    if not taken:
        return rules, ()
    return replace(rules, of_each={**taken, **rules.of_each}), (rules_as_before(taken, shown_name(path)),)


def _rules_beside(path: Path) -> Mapping[str, Rule]:
    beside = path.with_name(f"{path.name}.json")
    if not beside.is_file():
        return {}
    told = read_json(beside).get("quantities", [])
    known = {rule.value for rule in Rule}
    rows = [q for q in told if isinstance(q, dict)] if isinstance(told, list) else []
    return {str(q.get("name")): Rule(q["rule"]) for q in rows if q.get("rule") in known}
