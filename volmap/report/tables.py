"""The rows of the report's tables: plain records with finished words, ready to be laid out."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.report import scales
from volmap.report.gallery import voxel_ratio
from volmap.report.inputs import ReportInput
from volmap.report.scales import fixed, number
from volmap.types import Certificate, Gate, LabelVolume, Verdict

Floats = NDArray[np.float64]

MOST_PLACES = 3
MOST_GROUPS = 3


@dataclass(frozen=True)
class Fact:
    """One line of the comparison of the two scans."""

    what: str
    source: str
    target: str


def compared(inputs: ReportInput) -> list[Fact]:
    """What the two scans are."""
    pair = (inputs.source, inputs.target)
    images = [
        "none given" if image is None else scales.plain_text(image.name)
        for image in (inputs.source_image, inputs.target_image)
    ]
    rows = [
        ("label volume", [scales.plain_text(v.name) for v in pair]),
        ("digest (SHA-256 of voxels and affine)", [v.sha256[:12] + "…" for v in pair]),
        ("grid, voxels", [" × ".join(number(n) for n in v.grid.shape) for v in pair]),
        ("voxel edges, mm", [" × ".join(number(float(s), 3) for s in v.grid.spacing) for v in pair]),
        ("voxel indices rise toward", [_axes(v) for v in pair]),
        ("labels", [_label_list(v) for v in pair]),
        ("volume of all labels, mm³", [number(_volume(v, None), 5) for v in pair]),
        ("intensity image", images),
    ]
    return [Fact(what, a, b) for what, (a, b) in rows]


def _axes(volume: LabelVolume) -> str:
    letters = scales.axis_letters(volume.grid.affine)
    return f"{'-'.join(letters)} ({volume.grid.handedness}-handed)"


def _label_list(volume: LabelVolume) -> str:
    return ", ".join(f"{v} {scales.plain_text(volume.name_of(v), 60)}" for v in volume.present) or "none"


def _volume(volume: LabelVolume, label: int | None) -> float:
    chosen = volume.labels > 0 if label is None else volume.labels == label
    return int(np.count_nonzero(chosen)) * volume.grid.voxel_mm3


def label_names(inputs: ReportInput) -> dict[int, str]:
    """Names of all labels that occur anywhere."""
    found = sorted({*inputs.labels, *inputs.source.present, *inputs.target.present})
    return {v: scales.plain_text(inputs.source.names.get(v, inputs.target.name_of(v)), 60) for v in found}


def label_rows(inputs: ReportInput) -> list[dict[str, str]]:
    """One row a label, and where it comes from in each cell's key."""
    J, volumes, labels = inputs.map.volume_ratio, np.abs(inputs.map.mesh.volumes), inputs.map.mesh.labels
    images = np.abs(inputs.map.image_mesh.volumes)
    colours = scales.label_colours(inputs.labels)
    rows = []
    for label, name in label_names(inputs).items():
        mine = labels == label
        row = {
            "label": str(label),
            "name": name,
            "colour": colours.get(label, scales.UNNAMED),
            "source_mm3": number(round(_volume(inputs.source, label))),
            "target_mm3": number(round(_volume(inputs.target, label))),
            "voxel_ratio": fixed(voxel_ratio(inputs, label), 3),
        }
        low, mid, high = ("–",) * 3
        mean = "–"
        if mine.any():
            mean = fixed(images[mine].sum() / max(volumes[mine].sum(), 1e-300), 3)
            low, mid, high = (
                fixed(v, 3) for v in scales.weighted_quantile(J[mine], volumes[mine], [0.01, 0.5, 0.99])
            )
        row |= {"ratio_mean": mean, "ratio_p1": low, "ratio_p50": mid, "ratio_p99": high}
        rows.append(row | _certified(inputs.certificate, label))
    return rows


def _certified(certificate: Certificate, label: int) -> dict[str, str]:
    distance = _of_label(certificate, "boundary_distance_mm", label)
    overlap = _of_label(certificate, "overlap", label)
    mean = max((v for kind, v in distance if kind == "mean"), default=None)
    most = max((v for kind, v in distance if kind == "max"), default=None)
    dice = min((v for kind, v in overlap if kind in ("dice", "")), default=None)
    return {"distance_mean": fixed(mean, 2), "distance_max": fixed(most, 2), "dice": fixed(dice, 3)}


def _of_label(certificate: Certificate, name: str, label: int) -> list[tuple[str, float]]:
    """Every number a gate gives under that label, with its last name ("mean"); "" for a bare number."""
    found = []
    for gate in certificate.gates:
        if gate.name != name:
            continue
        for path, leaf in leaves(gate.value):
            if str(label) in path and isinstance(leaf, int | float):
                found.append(("" if path[-1] == str(label) else path[-1], float(leaf)))
    return found


def leaves(value: Any, path: tuple[str, ...] = ()) -> Iterator[tuple[tuple[str, ...], Any]]:
    """Every innermost value of nested mappings with the names that lead to it."""
    if isinstance(value, Mapping):
        for key, inner in value.items():
            yield from leaves(inner, (*path, str(key)))
    else:
        yield path, value


def told(value: Any, unit: str, names: Mapping[int, str], watched: Collection[str] = ()) -> list[str]:
    """A value or a limit of a gate, in lines: one a group, with names for label numbers.

    Parameters
    ----------
    watched : collection of str
        Entries that have the gate's own unit even when that is a count of something.
    """
    if value is None:
        return ["–"]
    lines: dict[str, list[str]] = {}
    for path, leaf in leaves(value):
        if PER_LABEL in path or GIVING_WAY in path:
            continue
        group = " · ".join(_named(p, names) for p in path[:-1])
        kind = _named(path[-1], names) if path else ""
        amount = _amount(leaf, _unit_of(path[-1] if path else "", leaf, unit, watched))
        lines.setdefault(group, []).append(f"{kind} {amount}".strip())
    own = lines.pop("", [])
    groups = [f"{group}: {', '.join(entries)}" for group, entries in lines.items()]
    if len(groups) > MOST_GROUPS:
        groups = [*groups[:MOST_GROUPS], f"and {len(groups) - MOST_GROUPS} more in the certificate"]
    return own + groups or ["–"]


GIVING_WAY = "giving_way"
"""Part of a gate's value that is told in a table of its own."""

PER_LABEL = "per_label"
"""Part of a gate's value that is told in the table of labels."""


def _unit_of(kind: str, leaf: Any, unit: str, watched: Collection[str]) -> str:
    """Unit of one entry: the one its name ends with, else the gate's; none for a pure number."""
    if kind.endswith("_mm") or kind.startswith("shell"):
        return "mm"
    if kind.endswith("_voxels"):
        return "voxel"
    if kind == "coverage":
        return ""
    if unit in ("1", "count", "ratio", "Dice"):
        return ""
    if unit == "mm":
        return "" if isinstance(leaf, int) and kind not in watched and kind else unit
    return unit if kind in watched or not kind else ""


def _watched(gate: Gate) -> set[str]:
    """Entries that a gate's limits watch: "mean" for "mean_above"."""
    limits = [key for limit in (gate.warn, gate.fail) if isinstance(limit, Mapping) for key in limit]
    return {*limits, *(str(key).rsplit("_", 1)[0] for key in limits)}


def _named(key: str, names: Mapping[int, str]) -> str:
    """A key in words: a label's name, "P99.9" for "p99_9", "mean above" for "mean_above"."""
    if key.isdigit() and int(key) in names:
        return names[int(key)]
    percentile = re.fullmatch(r"p(\d+)(?:_(\d+))?(_.*)?", key)
    if percentile:
        whole, part, rest = percentile.groups(default="")
        key = f"P{whole}.{part}{rest}" if part else f"P{whole}{rest}"
    return scales.plain_text(re.sub("_(mm|voxels)$", "", key).replace("_", " "), 60)


def _amount(leaf: Any, unit: str) -> str:
    if isinstance(leaf, list | tuple):
        text = (" to " if len(leaf) == 2 else ", ").join(number(v) for v in leaf)
    else:
        text = number(leaf)
    return scales.plain_text(f"{text} {unit}" if unit and text[-1:].isdigit() else text)


def gate_rows(certificate: Certificate, names: Mapping[int, str]) -> list[dict[str, Any]]:
    """One row a gate, worst first, otherwise as the certificate has them."""
    order = [Verdict.FAIL, Verdict.WARN, Verdict.PASS, Verdict.NOT_ASSESSED]
    gates = sorted(certificate.gates, key=lambda g: order.index(g.verdict))
    return [
        {
            "name": scales.plain_text(g.name),
            "words": gate_words(g),
            "sentence": scales.plain_text(g.sentence, 600),
            "value": told(g.value, g.unit, names, _watched(g)),
            "warn": told(g.warn, g.unit, names, _watched(g)),
            "fail": told(g.fail, g.unit, names, _watched(g)),
            "source": scales.plain_text(g.limit_source, 1200),
            "verdict": g.verdict.value,
            "word": scales.GATE_WORDS[g.verdict],
            "where": [_spot(w) for w in g.where[:MOST_PLACES]],
            "more": max(0, len(g.where) - MOST_PLACES),
        }
        for g in gates
    ]


def gate_words(gate: Gate) -> str:
    """The name of a gate as words, without its unit."""
    return scales.plain_text(gate.name.removesuffix("_mm").replace("_", " "))


def _spot(where: Mapping[str, Any]) -> str:
    space = {"source": "in A", "target": "in B"}.get(str(where.get("space", "")), "")
    note = scales.plain_text(str(where.get("note", "")))
    point = where.get("point_mm")
    at = "" if point is None else f"{scales.place(point)} mm {space}".strip()
    return ": ".join(p for p in (at, note) if p)


def given_boundary(certificate: Certificate) -> dict[str, Any] | None:
    """The section of a given boundary; None when the map was not given one."""
    gate = next((g for g in certificate.gates if g.name == "given_boundary_mm"), None)
    if gate is None or not isinstance(gate.value, Mapping):
        return None
    at_file = gate.value.get("at_file_points", {})
    return {
        "sentence": scales.plain_text(gate.sentence, 600),
        "at_file": {k: fixed(at_file[k], 2) for k in ("mean", "p95", "max")} if at_file else None,
        "gap": fixed(gate.value.get("surface_gap_mm"), 2),
        "places": [_spot(w) for w in gate.where],
        "rows": [
            {
                "tolerance": fixed(row["tolerance_mm"], 3),
                "asked": bool(row["tolerance_mm"] == gate.value.get("tolerance_mm")),
                "kept": bool(row["kept"]),
                "rms": fixed(row["rms_mm"], 3),
                "max": fixed(row["max_mm"], 3),
                "distortion": number(row["distortion"], 3),
                "ratio": number(row["smallest_ratio"], 3),
                "at": scales.place(row["where_mm"]),
            }
            for row in gate.value.get(GIVING_WAY, ())
        ],
    }


def verdict_sentence(certificate: Certificate) -> str:
    """Why the verdict is what it is, in one sentence."""
    by = {v: [g for g in certificate.gates if g.verdict is v] for v in Verdict}
    failed, warned, passed, unasked = (
        by[v] for v in (Verdict.FAIL, Verdict.WARN, Verdict.PASS, Verdict.NOT_ASSESSED)
    )
    assessed = len(failed) + len(warned) + len(passed)
    left = f"{_count(len(unasked), 'gate')} {'was' if len(unasked) == 1 else 'were'} not assessed"
    rest = f"; {left}" if unasked else ""
    if failed:
        return (
            f"{len(failed)} of {_count(assessed, 'assessed gate')} failed ({_list(failed)}){rest}. "
            "The map must not go into an analysis as it is."
        )
    if warned:
        return (
            f"No gate failed, but {len(warned)} of {_count(assessed, 'assessed gate')} "
            f"{'warns' if len(warned) == 1 else 'warn'} ({_list(warned)}){rest}."
        )
    if passed:
        whole = "The one assessed gate passed" if assessed == 1 else f"All {assessed} assessed gates passed"
        return f"{whole}{rest}."
    return "No gate was assessed, so nothing is known about whether the map can be trusted."


def _count(n: int, noun: str) -> str:
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def _list(gates: list[Gate]) -> str:
    return ", ".join(gate_words(g) for g in gates)
