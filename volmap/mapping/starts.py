"""Which start to keep when the alignment leaves doubt: each is solved, and the least objective wins.

Between bodies that fit each other nearly as well one way as turned otherwise, an affine residual cannot
decide.  The map can: laid on the wrong way round, it must bend and stretch more to reach the same boundary.
So every start in doubt climbs the ladder of boundary weights on the coarsest mesh at hand.  At equal weight
the objectives of two starts are comparable, and one that falls behind by a factor is given up.  When nothing
is in doubt, nothing is tried.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Generic, TypeVar

from volmap.mapping.alignment import Alignment, turned_deg
from volmap.types import IterationRecord

IN_DOUBT = 1.5  # starts with a residual within this factor of the chosen one are tried when turned otherwise
MOST_TRIED = 4  # starts, the chosen one included
OTHERWISE_DEG = 45.0  # between alignments that are not the same place
NEARLY_AS_GOOD = 1.25  # factor between two objectives within which they do not decide
BETTER = 0.95  # share of the objective of an earlier start below which a later one is preferred
NOTHING = 1e-6  # objectives that differ by less are alike: stretches of a thousandth
GIVEN_UP = 2.0  # objective over that of the best start, at equal weight, above which a start is given up

Result = TypeVar("Result")
History = Sequence[IterationRecord]
Watch = Callable[[History], bool]


@dataclass(frozen=True, eq=False)
class Trial(Generic[Result]):
    """One start, solved.

    Parameters
    ----------
    alignment : Alignment
    history : sequence of IterationRecord
    reached : bool
        The declared uncertainty, of boundary and guides.
    given_up : bool
    result : Result
        What the solve gave.
    """

    alignment: Alignment
    history: History
    reached: bool
    given_up: bool
    result: Result

    def objective_at(self, weight: float) -> float:
        """Distortion and boundary misfit at one weight (1/mm2) for all; where this start ended."""
        last = self.history[-1]
        return last.distortion + weight * last.residual_mm**2


def in_doubt(chosen: Alignment, tried: Sequence[Alignment]) -> tuple[Alignment, ...]:
    """The chosen start, and others that fit nearly as well but are turned otherwise, each place once.

    Empty when there is no other.
    """
    kept = [chosen]
    for other in sorted(tried, key=lambda a: a.residual_mm):
        near = other.residual_mm <= IN_DOUBT * chosen.residual_mm
        if near and all(turned_deg(k, other) > OTHERWISE_DEG for k in kept):
            kept.append(other)
    return tuple(kept[:MOST_TRIED]) if len(kept) > 1 else ()


def least_at(history: History, weight: float) -> float:
    """Least objective a solve reached at a weight; infinite when it was never there."""
    return min((h.energy for h in history if h.boundary_weight == weight), default=float("inf"))


def tried_out(
    starts: Sequence[Alignment], solve: Callable[[Alignment, Watch], tuple[Result, History, bool]]
) -> tuple[Trial[Result], ...]:
    """Solve from every start, the best first; where objectives hardly differ, the earlier start.

    Parameters
    ----------
    starts : sequence of Alignment
        From `in_doubt`.
    solve : callable
        Solves from an alignment and returns its result, its history, and whether the declared uncertainty was
        reached; when the watch, asked before the weight rises, says True of the history so far, the solve
        ends there.
    """
    trials: list[Trial[Result]] = []
    if not starts:
        return ()
    for start in starts:
        ahead = [t.history for t in trials if not t.given_up]
        hopeless: list[bool] = []

        def behind(history: History, ahead: list[History] = ahead, told: list[bool] = hopeless) -> bool:
            weight = history[-1].boundary_weight
            best = min((least_at(h, weight) for h in ahead), default=float("inf"))
            if least_at(history, weight) > GIVEN_UP * best + NOTHING:
                told.append(True)
            return bool(told)

        result, history, reached = solve(start, behind)
        trials.append(Trial(start, tuple(history), reached, bool(hopeless), result))
    hardest = max(t.history[-1].boundary_weight for t in trials)
    ranked = sorted(trials, key=lambda t: (t.given_up, not t.reached, t.objective_at(hardest)))
    least = ranked[0]
    alike = [
        t
        for t in trials
        if (t.given_up, t.reached) == (least.given_up, least.reached)
        and BETTER * t.objective_at(hardest) <= least.objective_at(hardest) + NOTHING
    ]
    return (alike[0], *(t for t in ranked if t is not alike[0]))


def told(trials: Sequence[Trial[Result]]) -> tuple[str, ...]:
    """Sentences about what was tried, with the objectives, and about the doubt that is left."""
    if not trials:
        return ()
    hardest = max(t.history[-1].boundary_weight for t in trials)
    best, second = trials[0], trials[1]
    words = ", ".join(
        f"'{t.alignment.name}' "
        + ("given up as hopeless" if t.given_up else f"{t.objective_at(hardest):.3f}")
        + ("" if t.given_up or t.reached else " without reaching the boundary")
        for t in trials
    )
    kept = (
        f"How the bodies lie on each other was in doubt, so {len(trials)} starts were solved "
        f"and the one with the least objective kept: {words}."
    )
    near = second.objective_at(hardest) <= NEARLY_AS_GOOD * best.objective_at(hardest) + NOTHING
    if second.given_up or second.reached < best.reached or not near:
        return (kept,)
    return (
        kept,
        f"It is still in doubt: start '{second.alignment.name}', turned by "
        f"{turned_deg(best.alignment, second.alignment):.0f} degrees against the one kept, gives a map "
        "nearly as good; check with landmarks, or give three guides.",
    )
