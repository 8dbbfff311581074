"""Starts in doubt: who is tried, who is given up, who wins; by histories made by hand."""

import numpy as np
import pytest
from hand_made_bodies import cubes, lopsided, rotation

from volmap.mapping import map_mesh, solve
from volmap.mapping.alignment import Alignment, align
from volmap.mapping.starts import in_doubt, told, tried_out
from volmap.types import IterationRecord, Status


def turned(name, degrees, residual_mm, axis=(0, 0, 1)):
    matrix = np.eye(4)
    matrix[:3, :3] = rotation(axis, degrees)
    return Alignment(name, matrix, residual_mm)


def record(weight, energy, distortion=0.0, residual_mm=0.0):
    return IterationRecord(1, weight, energy, distortion, residual_mm, 1.0, 10, 0.5)


CHOSEN = turned("centres", 0.0, 1.0)


@pytest.mark.parametrize(
    ("degrees", "residual_mm", "doubt"), [(180, 1.4, True), (180, 1.6, False), (40, 1.0, False)]
)
def test_who_is_in_doubt(degrees, residual_mm, doubt):
    """Within half the residual more, and turned by over 45 degrees."""
    other = turned("world", degrees, residual_mm)
    found = in_doubt(CHOSEN, (CHOSEN, other))
    assert found == ((CHOSEN, other) if doubt else ())


def test_each_place_is_tried_once_and_four_at_most():
    others = [turned(f"axes {k}", angle, 1.1 + k / 100) for k, angle in enumerate((180, 175, 90, 91, -90))]
    assert [a.name for a in in_doubt(CHOSEN, (*others, CHOSEN))] == ["centres", "axes 0", "axes 2", "axes 4"]
    more = [turned(f"x {angle}", angle, 1.2, axis=(1, 0, 0)) for angle in (90, 180, 270)]
    assert len(in_doubt(CHOSEN, (*more, *others, CHOSEN))) == 4


def climbing(ladders):
    """A solver that plays ladders of (weight, energy) back, one rung at a time, until told to stop."""

    def solve(alignment, watch):
        history = []
        for weight, energy in ladders[alignment.name]:
            history.append(record(weight, energy, distortion=energy / 2, residual_mm=0.1))
            if watch(history):
                break
        return alignment.name.upper(), history, len(history) == len(ladders[alignment.name])

    return solve


def test_the_least_objective_wins_at_equal_weight():
    other = turned("world", 180.0, 1.2)
    ladders = {"centres": [(1.0, 0.5), (3.0, 0.8)], "world": [(1.0, 0.45), (3.0, 0.6)]}
    best, second = tried_out((CHOSEN, other), climbing(ladders))
    assert (best.result, second.result) == ("WORLD", "CENTRES")
    assert not best.given_up
    assert not second.given_up
    # closed form: distortion + weight * residual^2 = 0.3 + 3 * 0.01
    assert best.objective_at(3.0) == pytest.approx(0.33)


def test_a_start_that_needs_less_weight_is_compared_at_the_same():
    """Settled at weight 1 with 0.30 + 1 * 0.01; at the other's weight of 10 it is 0.40, more than 0.35."""
    other = turned("world", 180.0, 1.2)
    ladders = {"centres": [(1.0, 0.6)], "world": [(1.0, 0.6), (10.0, 0.5)]}
    best, _ = tried_out((CHOSEN, other), climbing(ladders))
    assert best.result == "WORLD"


def test_a_start_that_falls_behind_is_given_up_and_loses():
    other = turned("world", 180.0, 1.2)
    ladders = {"centres": [(1.0, 0.2), (3.0, 0.3)], "world": [(1.0, 0.41), (3.0, 0.01)]}
    best, second = tried_out((CHOSEN, other), climbing(ladders))
    assert best.result == "CENTRES"
    assert second.given_up
    assert len(second.history) == 1
    (sentence,) = told((best, second))  # and no doubt is left
    assert "'world' given up" in sentence
    assert "'centres' 0.180" in sentence


def test_a_boundary_reached_comes_first():
    other = turned("world", 180.0, 1.2)

    def solve(alignment, watch):
        reached = alignment is other
        return alignment.name, [record(1.0, 1.0, distortion=0.5 if reached else 0.4)], reached

    best, second = tried_out((CHOSEN, other), solve)
    assert best.result == "world"
    assert "without reaching the boundary" in told((best, second))[0]
    assert told(()) == ()


def test_objectives_that_hardly_differ_leave_the_earlier_start_and_a_doubt():
    other = turned("world", 180.0, 1.2)
    ladders = {"centres": [(1.0, 0.50)], "world": [(1.0, 0.49)]}
    best, second = tried_out((CHOSEN, other), climbing(ladders))
    assert best.result == "CENTRES"
    assert "still in doubt" in told((best, second))[1]
    assert "180 degrees" in told((best, second))[1]


def test_the_map_rights_an_alignment_that_lies_the_wrong_way_round(monkeypatch):
    """Law: a body without symmetry onto itself stays; its alignment is made to prefer it upside down."""
    body = lopsided()
    right, _ = align(body.interfaces, body.interfaces)
    centre = body.points.mean(axis=0)
    wrong = np.eye(4)
    wrong[:3, :3] = rotation((1, 0, 0), 180.0)
    wrong[:3, 3] = centre - wrong[:3, :3] @ centre
    right, wrong = Alignment("right", right.matrix, 1.2), Alignment("wrong", wrong, 1.0)
    monkeypatch.setattr(solve, "align", lambda *_, **__: (wrong, (right, wrong)))
    outcome = map_mesh(body, body.interfaces).outcome
    assert outcome.status is Status.SETTLED
    assert outcome.start.startswith("right")
    assert np.abs(outcome.map.images - body.points).max() < 1e-3
    assert len(outcome.notes) == 1
    assert "kept: 'right'" in outcome.notes[0]


def test_a_bar_that_fits_either_way_stays_and_says_so():
    bar = cubes(np.ones((10, 3, 3), int))
    outcome = map_mesh(bar, bar.interfaces).outcome
    assert np.abs(outcome.map.images - bar.points).max() < 1e-6
    assert "still in doubt" in outcome.notes[1]
