"""From an alignment to a settled map, through coarser meshes and, in doubt, from several starts.

Coarser meshes of the same bodies, where there are any, go up the ladder of boundary weights first; each
finer one starts where the coarser one left off.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from volmap.mapping.alignment import Alignment, align
from volmap.mapping.climbing import Climber, State, climb, climbing_again
from volmap.mapping.given_boundary import KeptBoundary
from volmap.mapping.giving_way import giving_way
from volmap.mapping.guides import refuse_far_guides
from volmap.mapping.levels import Bodies, carried, facet_noise_mm, valid_start
from volmap.mapping.settings import MapSettings
from volmap.mapping.starts import History, Trial, Watch, in_doubt, told, tried_out
from volmap.types import (
    GivenBoundary,
    GivingWay,
    InputError,
    LandmarkPairs,
    Outcome,
    Progress,
    Status,
    Surface,
    TetMesh,
    VolumeMap,
    silent,
)

FEWEST_TETS = 2000  # of a coarser mesh that is used: facets of fewer say little about starts and boundary
GUIDE_REACH_VOXELS = 3.0  # guides farther outside the body are refused


@dataclass(frozen=True)
class Solved:
    """An outcome with the alignment it started from and every alignment tried; what is needed to go on."""

    outcome: Outcome
    alignment: Alignment
    tried: tuple[Alignment, ...]
    solver: Climber
    state: State


@dataclass(frozen=True, eq=False)
class _Task:
    """What is asked for: the levels, coarsest first, and what holds on all of them."""

    levels: tuple[Bodies, ...]
    settings: MapSettings
    guides: LandmarkPairs | None
    voxel_mm: float
    progress: Progress
    kept: KeptBoundary | None = None

    def climber(self, depth: int, alignment: Alignment) -> Climber:
        level, finest = self.levels[depth], self.levels[-1]
        noise = 0.0
        if level is not finest:
            noise = float(
                np.hypot(
                    facet_noise_mm(level.mesh.interfaces, finest.mesh.interfaces),
                    facet_noise_mm(level.target, finest.target),
                )
            )
        return Climber(
            level.mesh,
            level.target,
            self.settings,
            alignment=alignment,
            guides=self.guides,
            voxel_mm=self.voxel_mm,
            facet_noise_mm=noise,
            kept=self.kept,
        )


@dataclass(frozen=True, eq=False)
class _Reached:
    """How far a solve from one start has come."""

    alignment: Alignment
    solver: Climber
    state: State
    status: Status


def _first(task: _Task, alignment: Alignment, solver: Climber) -> State:
    """Before the first step, on the coarsest level."""
    weight = task.settings.first_weight * solver.unit
    start = alignment.apply(np.array(task.levels[0].mesh.points))
    return State(start, weight, weight, [], settles=len(task.levels) == 1, given_weight=weight)


def _begun(task: _Task, alignment: Alignment, watch: Watch | None = None) -> _Reached:
    """Climb on the coarsest level."""
    solver = task.climber(0, alignment)
    state = _first(task, alignment, solver)
    status = climb(solver, state, task.progress, watch=watch) or Status.OUT_OF_STEPS
    return _Reached(alignment, solver, state, status)


def _refined(task: _Task, reached: _Reached) -> _Reached:
    """Go on from the coarsest level to each finer one; settle on the finest."""
    for depth in range(1, len(task.levels)):
        alignment, state = reached.alignment, reached.state
        del reached  # the coarse solver's memory is free for the finer one
        solver = task.climber(depth, alignment)
        points = np.array(task.levels[depth].mesh.points)
        wanted = carried(task.levels[depth - 1].mesh, state.images, points)
        start = valid_start(solver.objective, alignment.apply(points), wanted, unit=solver.unit)
        settles = depth == len(task.levels) - 1
        state = replace(
            state,
            images=start,
            settles=settles,
            levels=[],
            settling=False,
            settled_for=0,
            lowering=True,
            idle=0,
            gain=1.0,
        )
        status = climb(solver, state, task.progress) or Status.OUT_OF_STEPS
        reached = _Reached(alignment, solver, state, status)
    return reached


def _from_every_start(task: _Task, starts: Sequence[Alignment]) -> tuple[Trial[_Reached], ...]:
    """Solve on the coarsest level from every start in doubt, the best first."""

    def solve(start: Alignment, watch: Watch) -> tuple[_Reached, History, bool]:
        reached = _begun(task, start, watch)
        _, residual = reached.solver.pulls(reached.state)
        inside = reached.solver.boundary_reached(residual)
        inside = inside and reached.solver.guides_reached(reached.state.images)
        return reached, reached.state.history, inside

    return tried_out(starts, solve)


def map_mesh(
    mesh: TetMesh,
    target: Surface,
    settings: MapSettings | None = None,
    *,
    voxel_mm: float = 1.0,
    guides: LandmarkPairs | None = None,
    given: GivenBoundary | None = None,
    other_tolerances: bool = True,
    coarser: Sequence[Bodies] = (),
    progress: Progress = silent,
) -> Solved:
    """Map a mesh onto the label surfaces of another body.

    Parameters
    ----------
    mesh : TetMesh
        The source body; every tet positive.
    target : Surface
        Label surfaces of the target body, same labels, in the target's world.
    settings : MapSettings
    voxel_mm : float
        "One voxel" as a length, for the declared uncertainty.
    guides : LandmarkPairs, optional
        Pairs that steer the map.
    given : GivenBoundary, optional
        Where the boundary, or a part of it, goes, from SOURCE to TARGET.  What it does not speak of is
        matched with the target's surface.
    other_tolerances : bool
        With a given boundary, also find out what smaller and larger tolerances would cost.
    coarser : sequence of Bodies, optional
        Coarser meshes of the same bodies, next to `mesh` first: the solve starts on the coarsest.  They save
        time, and are no part of the answer; with a given boundary they are not used.
    progress : Progress

    Returns
    -------
    Solved

    Raises
    ------
    InputError
        The bodies hold different labels, a tet of the mesh is not positive, a guide lies outside the
        source body, or the given boundary speaks of no part of it.
    """
    settings = settings or MapSettings()
    here, there = set(mesh.present), {int(v) for v in np.unique(target.sides) if v}
    if here != there:
        raise InputError(
            "the two scans hold different labels",
            found=f"{sorted(here)} and {sorted(there)}",
            expected="the same set",
            refused=True,
        )
    inverted = int((mesh.volumes <= 0).sum())
    if inverted:
        raise InputError(
            "tets of the mesh are not positive",
            where="mesh",
            found=f"{inverted} of {len(mesh.tets)}",
            expected="every tet positive",
            remedy="mesh the scan again",
        )
    if guides is not None:
        refuse_far_guides(mesh, guides, reach_mm=GUIDE_REACH_VOXELS * voxel_mm)
    progress("align", 0, 0)
    kept = KeptBoundary(mesh, given) if given is not None else None
    useful = [bodies for bodies in reversed(coarser) if len(bodies.mesh.tets) >= FEWEST_TETS]
    levels = (Bodies(mesh, target),) if kept is not None else (*useful, Bodies(mesh, target))
    task = _Task(levels, settings, guides, voxel_mm, progress, kept)
    alignment, tried = _aligned(task)
    starts = in_doubt(alignment, tried) if settings.start == "auto" else ()
    trials = _from_every_start(task, starts) if starts else ()
    reached = _refined(task, trials[0].result if trials else _begun(task, alignment))
    rows: tuple[GivingWay, ...] = ()
    if kept is not None and other_tolerances:
        again = climbing_again(reached.solver)
        first = _first(task, alignment, reached.solver)
        rows = giving_way(mesh, kept, start=first, found=reached.state, climb=again, progress=progress)
    words = ", ".join(f"{a.name} {a.residual_mm:.2f} mm" for a in tried)
    chosen = reached.alignment
    start = f"{chosen.name}, turned by {chosen.rotation_deg:.0f} degrees (residuals: {words})"
    history = tuple(reached.state.history)
    notes = (*told(trials), *reached.solver.notes)
    images = VolumeMap(mesh, reached.state.images)
    outcome = Outcome(images, reached.status, history, start, notes, rows)
    return Solved(outcome, chosen, tried, reached.solver, reached.state)


def _aligned(task: _Task) -> tuple[Alignment, tuple[Alignment, ...]]:
    """The alignment to start from, and all that were tried: by the given boundary, if there is one."""
    if task.kept is not None:
        start = task.kept.start()
        return start, (start,)
    finest = task.levels[-1]  # it costs by samples, not by faces, and facets are noise to it
    surface = finest.mesh.interfaces
    return align(
        surface, finest.target, start=task.settings.start, guides=task.guides, seed=task.settings.seed
    )
