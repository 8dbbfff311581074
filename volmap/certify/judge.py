"""From statistics and limits to a gate."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from volmap.certify.table import Limit
from volmap.types.certificate import Gate, Verdict


def tripped(statistics: Mapping[str, float], limits: Mapping[str, float]) -> list[str]:
    """The limits that do not hold, as "mean 0.7 above 0.35"; a value that is no number holds nowhere.

    A limit on a statistic that was not measured is passed over.
    """
    found = []
    for key, limit in limits.items():
        name, side = key.rsplit("_", 1)
        if name not in statistics:
            continue
        value = statistics[name]
        holds = value <= limit if side == "above" else value >= limit
        if not holds:
            found.append(f"{name} {value:.4g} {side} {limit:.4g}")
    return found


def judged(
    limit: Limit,
    statistics: Mapping[str, float],
    *,
    value: Any,
    sentence: str,
    voxel_mm: float = 1.0,
    where: Sequence[dict[str, Any]] = (),
) -> Gate:
    """A gate from what was measured.

    Parameters
    ----------
    limit : Limit
    statistics : mapping of str to float
        What the limits speak about, in the gate's unit; lengths in mm.
    value : JSON value
        What the certificate shows.
    sentence : str
        What was found; the limits that tripped are added to it.
    voxel_mm : float
        Length of a voxel, for limits in voxels.
    where : sequence of dict
    """
    warn, fail = limit.warns_at(voxel_mm), limit.fails_at(voxel_mm)
    failed, warned = tripped(statistics, fail), tripped(statistics, warn)
    verdict = Verdict.FAIL if failed else Verdict.WARN if warned else Verdict.PASS
    reasons = failed or warned
    unit = "" if limit.unit_of_limits == "1" else f" ({limit.unit_of_limits})"
    tail = f" Beyond the limit: {', '.join(reasons)}{unit}." if reasons else ""
    return Gate(
        limit.name, value, limit.unit, warn, fail, limit.source, verdict, tuple(where), sentence + tail
    )


def not_assessed(limit: Limit, reason: str, *, voxel_mm: float = 1.0) -> Gate:
    """A gate that was not run, and why."""
    return Gate(
        limit.name,
        None,
        limit.unit,
        limit.warns_at(voxel_mm),
        limit.fails_at(voxel_mm),
        limit.source,
        Verdict.NOT_ASSESSED,
        (),
        f"Not assessed: {reason}.",
    )
