"""The methods paragraph, told from the settings."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from volmap.report import scales
from volmap.report.inputs import ReportInput
from volmap.report.scales import number
from volmap.report.tables import leaves
from volmap.types import Gate, Verdict


def settings_rows(inputs: ReportInput) -> list[tuple[str, str]]:
    """Every setting by its full name, as used; those of the inputs win over the certificate's."""
    merged = {p: v for s in (inputs.certificate.settings, inputs.settings) for p, v in leaves(s)}
    return [(scales.plain_text(".".join(p)), _shown(v)) for p, v in merged.items()]


def version_rows(inputs: ReportInput) -> list[tuple[str, str]]:
    """Software and versions."""
    return [
        (scales.plain_text(".".join(p)), scales.plain_text(str(v)))
        for p, v in leaves(inputs.certificate.versions)
    ]


def _shown(value: Any) -> str:
    if isinstance(value, list | tuple):
        return scales.plain_text(", ".join(_shown(v) for v in value), 300)
    return number(value, 4)


def methods(inputs: ReportInput) -> list[str]:
    """Sentences that say what was done; only what is known is told."""
    known = {p[-1]: v for s in (inputs.certificate.settings, inputs.settings) for p, v in leaves(s) if p}
    told = [
        _meshing(inputs, known),
        _solving(inputs, known),
        _drawing_together(inputs),
        _guiding(inputs),
        _signs(inputs),
        _ending(inputs),
        _checking(inputs),
        _software(inputs),
    ]
    return [t for t in told if t]


def _meshing(inputs: ReportInput, known: Mapping[str, Any]) -> str:
    mesh = inputs.map.mesh
    parts = [f"{number(len(mesh.points))} points and {number(len(mesh.tets))} tetrahedra"]
    edge_mm = inputs.certificate.mesh.get("edge_mm", known.get("edge_mm"))  # as meshed; else as asked for
    if edge_mm is not None:
        parts.append(f"an edge length of {number(edge_mm)} mm")
    angle = inputs.certificate.mesh.get("min_dihedral_deg")
    if angle is not None:
        parts.append(f"a smallest dihedral angle of {number(angle)}°")
    n = len(inputs.labels)
    labels = "one label" if n == 1 else f"{n} labels with shared interfaces"
    side = "target" if known.get("solved_on") == "target" else "source"
    name = scales.plain_text(getattr(inputs, side).name)
    sentence = f"The {side} segmentation ({name}; {labels}) was meshed with {_and(parts)}."
    if side == "target":
        sentence += (
            " The pair was solved on that mesh, and the map handed out is the exact inverse of the solution."
        )
    return sentence


def _and(parts: list[str]) -> str:
    return parts[0] if len(parts) == 1 else ", ".join(parts[:-1]) + " and " + parts[-1]


def _solving(inputs: ReportInput, known: Mapping[str, Any]) -> str:
    energy = known.get("energy")
    density = "a distortion energy" if energy is None else f"the distortion energy “{_shown(energy)}”"
    sentence = (
        f"A piecewise affine map into the target ({scales.plain_text(inputs.target.name)}) was found by "
        f"minimising {density}, symmetrised so that neither scan is preferred and measured against the "
        "source enlarged or reduced to the target's volume, together with the squared "
        "distances between matching label interfaces, measured in both directions"
    )
    sentence += _ladder(known)
    if inputs.history:
        steps = len(inputs.history)
        linear = sum(h.linear_iterations for h in inputs.history)
        sentence += f", in {number(steps)} Newton steps ({number(linear)} linear iterations)"
    return sentence + "."


def _ladder(known: Mapping[str, Any]) -> str:
    """How the boundary weight rose, and where it stopped."""
    told = ""
    if all(known.get(k) is not None for k in ("first_weight", "weight_factor", "last_weight")):
        first, factor, last = (number(known[k]) for k in ("first_weight", "weight_factor", "last_weight"))
        told = f", whose weight rose by factors of {factor} from {first} to at most {last} (0.02 V^(1/3))⁻²"
    elif known.get("ladder") is not None:
        told = f", whose weight rose over the ladder {_shown(known['ladder'])}"
    for key, unit in (("uncertainty_mm", "mm"), ("uncertainty_voxels", "voxel")):
        if told and known.get(key) is not None:
            limit = f"{number(known[key])} {unit}"
            return f"{told}, and no further once the residual was within the declared {limit}"
    return told


def _drawing_together(inputs: ReportInput) -> str:
    """Only when the certificate measured the two solves before that as well."""
    gate = _gate(inputs, "order_difference_mm")
    if gate is None or not isinstance(gate.value, Mapping) or "alone" not in gate.value:
        return ""
    return (
        "The pair was solved on the other scan's mesh as well, and both solutions were drawn to the middle "
        "of the two, so that the map depends less on whose mesh it was solved on."
    )


def _guiding(inputs: ReportInput) -> str:
    guides = 0 if inputs.checks is None else inputs.checks.roles.count("guide")
    if not guides:
        return "No landmark steered the map."
    words = "landmarks steered the map and count" if guides > 1 else "landmark steered the map and counts"
    return f"{number(guides)} guide {words} as no evidence."


def _gate(inputs: ReportInput, name: str) -> Gate | None:
    return next((g for g in inputs.certificate.gates if g.name == name), None)


def _signs(inputs: ReportInput) -> str:
    gate = _gate(inputs, "inverted_tets")
    found = gate.value.get("count") if gate is not None and isinstance(gate.value, Mapping) else None
    found = gate.value if gate is not None and isinstance(gate.value, int) else found
    if gate is None or gate.verdict is Verdict.NOT_ASSESSED or not isinstance(found, int):
        return "The orientation of the mapped tetrahedra was not certified."
    count = "none was" if found == 0 else f"{number(found)} {'was' if found == 1 else 'were'}"
    return f"The orientation of every mapped tetrahedron was decided with exact arithmetic; {count} inverted."


def _ending(inputs: ReportInput) -> str:
    if not inputs.certificate.status:
        return ""
    return f"The solve ended with the statement: “{scales.plain_text(inputs.certificate.status, 400)}”"


def _checking(inputs: ReportInput) -> str:
    checks = 0 if inputs.checks is None else inputs.checks.roles.count("check")
    if not checks:
        return "No independent landmark was available to check the interior."
    return (
        f"{number(checks)} independent check landmark{'s were' if checks > 1 else ' was'} carried by the map "
        "and by an affine baseline, and the distance to the observed partner was measured in the target."
    )


def _software(inputs: ReportInput) -> str:
    rows = version_rows(inputs)
    return "Software: " + ", ".join(f"{name} {version}" for name, version in rows) + "." if rows else ""
