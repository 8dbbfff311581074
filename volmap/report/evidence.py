"""Landmarks and worst places."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.report import scales
from volmap.report.inputs import ReportInput
from volmap.report.tables import label_names
from volmap.report.through import Passage

Floats = NDArray[np.float64]

MOST_LANDMARKS = 200
MOST_PLACES = 4


def landmark_errors(inputs: ReportInput) -> tuple[Floats, Floats]:
    """Distances (n,) in the target to each point's partner: by the map, and by the affine baseline.

    NaN where one was not given or lies outside.
    """
    assert inputs.checks is not None
    wanted = inputs.checks.to_points
    missing = np.full(len(wanted), np.nan)
    errors = [
        missing if got is None else np.linalg.norm(got - wanted, axis=1)
        for got in (inputs.carried, inputs.baseline)
    ]
    return np.asarray(errors[0]), np.asarray(errors[1])


def landmark_table(inputs: ReportInput) -> dict[str, Any] | None:
    """Rows and summaries of the landmarks; None when there are none."""
    if inputs.checks is None or not len(inputs.checks.points):
        return None
    by_map, by_affine = landmark_errors(inputs)
    roles = np.array(inputs.checks.roles)
    order = np.argsort(roles == "guide", kind="stable")
    if len(order) > MOST_LANDMARKS:
        badness = np.where(np.isnan(by_map), np.inf, by_map)
        kept = np.sort(np.argsort(-badness, kind="stable")[:MOST_LANDMARKS])
        order = order[np.isin(order, kept)]
    rows = [
        {
            "name": scales.plain_text(inputs.checks.names[i], 60),
            "role": str(roles[i]),
            "map": _error(by_map[i], inputs.carried is not None),
            "affine": _error(by_affine[i], inputs.baseline is not None),
            "at": scales.place(inputs.checks.points[i]),
        }
        for i in order
    ]
    summaries = [
        _summary(role, words, roles == role, by_map, by_affine)
        for role, words in (("check", "checks (evidence)"), ("guide", "guides (not evidence)"))
        if (roles == role).any()
    ]
    return {
        "rows": rows,
        "summaries": summaries,
        "left_out": len(roles) - len(rows),
        "has_checks": bool((roles == "check").any()),
        "has_guides": bool((roles == "guide").any()),
    }


def _error(value: float, given: bool) -> str:
    if not given:
        return "–"
    return "outside the mesh" if np.isnan(value) else scales.fixed(value, 2)


def _summary(
    role: str, words: str, chosen: NDArray[np.bool_], by_map: Floats, by_affine: Floats
) -> dict[str, Any]:
    return {
        "role": role,
        "words": words,
        "count": int(chosen.sum()),
        "map": _spread(by_map[chosen]),
        "affine": _spread(by_affine[chosen]),
    }


def _spread(values: Floats) -> dict[str, str]:
    known = values[np.isfinite(values)]
    if not known.size:
        return dict.fromkeys(("mean", "p95", "max"), "–")
    numbers = (known.mean(), np.quantile(known, 0.95), known.max())
    return {k: scales.fixed(v, 2) for k, v in zip(("mean", "p95", "max"), numbers, strict=True)}


def worst_places(inputs: ReportInput) -> list[dict[str, str]]:
    """Where the map shrinks and grows most, and where the certificate found the boundary furthest off."""
    return [*_ratio_extremes(inputs), *_far_boundaries(inputs)]


def _ratio_extremes(inputs: ReportInput) -> list[dict[str, str]]:
    J = np.where(np.isfinite(inputs.map.volume_ratio), inputs.map.volume_ratio, -np.inf)
    middles = [np.asarray(m.points[m.tets].mean(axis=1)) for m in (inputs.map.mesh, inputs.map.image_mesh)]
    apart = 0.08 * float(np.linalg.norm(np.ptp(middles[0], axis=0)))
    names = label_names(inputs)
    rows = []
    for words, order in (
        ("smallest J", np.argsort(J, kind="stable")),
        ("largest J", np.argsort(-J, kind="stable")),
    ):
        for t in _spread_out(order[:4000], middles[0], apart):
            value = scales.fixed(inputs.map.volume_ratio[t], 3)
            label = names[int(inputs.map.mesh.labels[t])]
            rows.append(_row(words, value, middles[0][t], middles[1][t], label))
    return rows


def _spread_out(order: NDArray[np.int64], middles: Floats, apart: float) -> Iterator[int]:
    """The first few of an order that are not neighbours of one another."""
    taken: list[int] = []
    for t in order:
        if all(np.linalg.norm(middles[t] - middles[k]) > apart for k in taken):
            taken.append(int(t))
            yield int(t)
        if len(taken) == MOST_PLACES:
            return


def _far_boundaries(inputs: ReportInput) -> list[dict[str, str]]:
    places = [
        w
        for gate in inputs.certificate.gates
        if gate.name == "boundary_distance_mm"
        for w in gate.where
        if w.get("point_mm") is not None and w.get("space") in ("source", "target")
    ]
    names, rows = label_names(inputs), []
    ways = {"source": Passage(inputs.map), "target": Passage(inputs.map.reversed())}
    for w in places[:MOST_PLACES]:
        point = np.asarray(w["point_mm"], np.float64).reshape(1, 3)
        way = ways[str(w["space"])]
        other = way.carry(point)
        tet, _ = way.tet_of(point)
        a, b = (point, other) if w["space"] == "source" else (other, point)
        note = scales.plain_text(str(w.get("note", ""))) or "–"
        rows.append(
            _row("largest boundary distance", note, a[0], b[0], names[int(inputs.map.mesh.labels[tet[0]])])
        )
    return rows


def _row(words: str, value: str, source: Floats, target: Floats, label: str) -> dict[str, str]:
    return {
        "what": words,
        "value": value,
        "source": scales.place(source),
        "target": scales.place(target),
        "label": label,
    }
