"""Polylines through a map: the image of a straight segment bends where it goes from tet to tet."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from volmap.carry.outside import nothing_left, outside_findings
from volmap.carry.points import MovedPoints, move_points
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.things import Carried, carry
from volmap.kernels.walking import face_crossings
from volmap.types import Finding, Grid, Level, MapChain, Polylines, VolumeMap

_ROUNDING_MM = 1e-6  # crossings lie in the body but for rounding


@carry.register
def _carry_polylines(
    thing: Polylines,
    volume_map: VolumeMap | MapChain,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed = volume_map.reversed() if reverse else volume_map
    here = thing
    findings: tuple[Finding, ...] = ()
    for step in directed.maps:
        here, seen = _through_one(here, step, settings)
        findings += seen
    return Carried(here, findings, _length_facts(thing, here, settings))


def with_bends(lines: Polylines, volume_map: VolumeMap) -> Polylines:
    """The same lines with a point more wherever one goes through a face of the map's mesh.

    A map is affine in each tet, so the image of such a line, joined by straight segments, is the exact image
    of the line.

    Parameters
    ----------
    lines : Polylines
        In the map's SOURCE.
    volume_map : VolumeMap
    """
    vertices, tets = np.array(volume_map.mesh.points), np.array(volume_map.mesh.tets)
    first = lines.segments
    start, end = lines.points[first], lines.points[first + 1]
    segment, share = face_crossings(vertices, tets, start, end)
    places = start[segment] + share[:, None] * (end[segment] - start[segment])
    line = lines.line_of_point[first[segment]]
    counts = np.diff(lines.starts) + np.bincount(line, minlength=len(lines.names))
    return replace(
        lines,
        points=np.insert(np.array(lines.points), first[segment] + 1, places, axis=0),
        starts=np.concatenate([[0], np.cumsum(counts)]),
    )


def _through_one(
    lines: Polylines, volume_map: VolumeMap, settings: CarrySettings
) -> tuple[Polylines, tuple[Finding, ...]]:
    """Lines whose every point has an answer, there; the others are left out and named."""
    moved = move_points(volume_map, lines.points, reach_mm=settings.reach)
    whole = np.bincount(lines.line_of_point[~moved.carried], minlength=len(lines.names)) == 0
    findings = _findings(lines, moved, whole)
    kept = lines.lines(whole)
    if settings.bends and len(kept.names):
        kept = with_bends(kept, volume_map)
        reach = max(settings.reach, _ROUNDING_MM)
        images = move_points(volume_map, kept.points, reach_mm=reach)
        return replace(kept, points=images.points), findings + _leaving_findings(kept, volume_map)
    return replace(kept, points=moved.points[whole[lines.line_of_point]]), findings


def _findings(lines: Polylines, moved: MovedPoints, whole: NDArray[np.bool_]) -> tuple[Finding, ...]:
    """Who was outside, and which lines are left out for it."""
    if not (moved.outside_mm > 0).any():
        return ()
    line = lines.line_of_point
    names = [f"{lines.names[i]} point {p - lines.starts[i] + 1}" for p, i in enumerate(line.tolist())]
    findings = outside_findings(moved, names, "lines")
    if not whole.any():
        raise nothing_left("lines", f"points outside in all {len(lines.names)} lines")
    if not whole.all():
        lost = [name for name, keep in zip(lines.names, whole, strict=True) if not keep]
        sentence = (
            f"{len(lost)} of {len(lines.names)} lines have such points and were left out: "
            + ", ".join([*lost[:10], *(["..."] if len(lost) > 10 else [])])
        )
        findings += (Finding(Level.WARN, "lines-left-out", "lines", sentence, "cut them to the body"),)
    return findings


def _leaving_findings(bent: Polylines, volume_map: VolumeMap) -> tuple[Finding, ...]:
    """Lines that leave the body between two of their points."""
    first = bent.segments
    middle = 0.5 * (bent.points[first] + bent.points[first + 1])
    out = first[move_points(volume_map, middle).outside_mm > _ROUNDING_MM]
    if not len(out):
        return ()
    n = len(np.unique(bent.line_of_point[out]))
    sentence = (
        f"{n} of {len(bent.names)} lines leave the body on their way; what lies outside was joined by "
        "straight segments, not measured"
    )
    return (Finding(Level.WARN, "lines-leave-body", "lines", sentence),)


def _length_facts(before: Polylines, after: Polylines, settings: CarrySettings) -> dict[str, object]:
    """Lengths in both worlds, a row a line that was carried."""
    there = dict(zip(after.names, after.lengths_mm.tolist(), strict=True))
    here = zip(before.names, before.lengths_mm.tolist(), strict=True)
    rows = [
        {"name": name, "length_before_mm": length, "length_after_mm": there[name]}
        for name, length in here
        if name in there
    ]
    how = "exact: with a point wherever the image bends" if settings.bends else "of the carried points alone"
    return {"lines": rows, "lengths": how}
