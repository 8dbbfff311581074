"""The gate for how the solve ended: each status, and a user's own limits for it.

Truth: the definition of each status in volmap.types.outcome; the built-in table only warns.
"""

from dataclasses import replace

import pytest

from volmap.certify import certify
from volmap.types import Status, Verdict


def settled(evidence, table, status):
    gates, _ = certify(replace(evidence, status=status), table)
    return next(gate for gate in gates if gate.name == "solve_settled")


@pytest.mark.parametrize(
    ("status", "verdict", "unreached", "unfinished"),
    [
        (Status.SETTLED, Verdict.PASS, 0, 0),
        (Status.BOUNDARY_NOT_REACHED, Verdict.WARN, 1, 0),
        (Status.GIVEN_BOUNDARY_NOT_KEPT, Verdict.WARN, 1, 0),
        (Status.OUT_OF_STEPS, Verdict.WARN, 0, 1),
        (Status.STALLED, Verdict.WARN, 0, 1),
    ],
)
def test_only_a_settled_solve_passes(sound, table, status, verdict, unreached, unfinished):
    gate = settled(sound, table, status)
    assert gate.verdict is verdict
    assert gate.value == {"status": status.name, "unreached": unreached, "unfinished": unfinished}
    assert status.value in gate.sentence


def test_every_status_is_told_apart():
    assert {status.name for status in Status} == {
        "SETTLED",
        "BOUNDARY_NOT_REACHED",
        "GIVEN_BOUNDARY_NOT_KEPT",
        "OUT_OF_STEPS",
        "STALLED",
    }


def test_a_users_table_may_fail_an_unfinished_solve(sound, table):
    strict = replace(table["solve_settled"], fail={"unfinished_above": 0.0})
    own = replace(table, limits={**table.limits, "solve_settled": strict})
    assert settled(sound, own, Status.STALLED).verdict is Verdict.FAIL
    assert settled(sound, own, Status.BOUNDARY_NOT_REACHED).verdict is Verdict.WARN


def test_an_unknown_end_is_not_assessed(sound, table):
    gate = settled(sound, table, None)
    assert gate.verdict is Verdict.NOT_ASSESSED
    assert gate.value is None
