"""Gate: whether the solve did what it set out to do."""

from __future__ import annotations

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged, not_assessed
from volmap.certify.table import Limit
from volmap.types.certificate import Gate
from volmap.types.outcome import Status


def solve_settled(evidence: Evidence, limit: Limit) -> Gate:
    """Says how the solve ended; a map that is valid but unfinished is not called done."""
    status = evidence.status
    if status is None:
        return not_assessed(limit, "how the solve ended is not known")
    counts = {
        "unreached": float(status in (Status.BOUNDARY_NOT_REACHED, Status.GIVEN_BOUNDARY_NOT_KEPT)),
        "unfinished": float(status in (Status.OUT_OF_STEPS, Status.STALLED)),
    }
    return judged(limit, counts, value={"status": status.name, **counts}, sentence=status.value)
