"""Points outside the body: who, how far, and what was done about it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from volmap.carry.points import MovedPoints
from volmap.types import Finding, InputError, Level

_NAMED = 10  # points that are named one by one
_FATES = {
    "outside-carried": "carried with the affine map of the nearest tet, not measured",
    "outside-left-out": "not carried",
}


def outside_findings(moved: MovedPoints, names: Sequence[str], where: str) -> tuple[Finding, ...]:
    """Findings about points outside, the farthest of them by name.

    Parameters
    ----------
    moved : MovedPoints
    names : sequence of str
        One a point.
    where : str
        What the points are.

    Raises
    ------
    InputError
        No point at all was carried.
    """
    findings = []
    if len(names) and not moved.carried.any():
        raise nothing_left(
            where, f"the nearest of {len(names)} points {moved.outside_mm.min():.2f} mm outside"
        )
    for chosen, code in ((moved.extrapolated, "outside-carried"), (~moved.carried, "outside-left-out")):
        which = np.flatnonzero(chosen)
        if len(which):
            said = which
            if len(which) > _NAMED:
                said = which[np.argsort(-moved.outside_mm[which], kind="stable")[:_NAMED]]
            named = ", ".join(f"{names[i]} ({moved.outside_mm[i]:.2f} mm)" for i in said.tolist())
            rest = f" and {len(which) - _NAMED} nearer ones" if len(which) > _NAMED else ""
            sentence = (
                f"{len(which)} of {len(names)} points lie outside the body and were {_FATES[code]}: "
                f"{named}{rest}"
            )
            remedy = "check that the points belong to this scan and lie in the segmented body"
            findings.append(Finding(Level.WARN, code, where, sentence, remedy))
    return tuple(findings)


def nothing_left(where: str, found: str) -> InputError:
    """The refusal of a thing of which nothing lies in the body."""
    return InputError(
        "nothing of it lies in the body, so there is nothing to carry",
        where=where,
        found=found,
        remedy="check the direction, and that it belongs to this scan",
        refused=True,
    )
