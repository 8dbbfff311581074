"""Up a ladder of boundary weights and down to rest, on one mesh: Newton steps that never invert a tet."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.observations import Observations, joined
from volmap.mapping.alignment import Alignment
from volmap.mapping.contact import Contact
from volmap.mapping.given_boundary import KeptBoundary
from volmap.mapping.guides import guide_observations, guide_rms
from volmap.mapping.matching import Matcher, Residual
from volmap.mapping.objective import Objective
from volmap.mapping.patches import matching_patches, steady_contacts
from volmap.mapping.settings import MapSettings
from volmap.types import IterationRecord, LandmarkPairs, Progress, Status, Surface, TetMesh, silent

Floats = NDArray[np.float64]
Watch = Callable[[Sequence[IterationRecord]], bool]

LOOSEST, TIGHTEST = 0.1, 0.002  # relative residual of the linear solves: the forcing rule stays between
A_RUNG = 1.7  # by which a residual grows at most from a rung to the one below, as measured on phantoms
STALLED_STEPS = 3  # steps in a row that hardly move before it counts as stalled
PLATEAU = 4  # steps over which the objective, freshly matched, must still fall
CREEPING = 25  # steps of settling after which friction is what holds a solve up, and is lowered once
LESS_FRICTION = 0.1  # by this factor
NOTHING = 1e-9  # an objective this small has nothing left to fall: stretches of some 1e-5
HARDEST_PULL = (
    3.0  # of a given boundary at the edge of its tolerance, in units of the ladder and 0.02 V^(1/3)
)
STEPS_AGAIN = 60  # at most, at each other tolerance of a given boundary
MOST_UNMATCHED = 0.05  # of the boundary's area, for a boundary that counts as reached


@dataclass
class State:
    """Where a solve is; replaced piece by piece."""

    images: Floats
    boundary_weight: float
    guide_weight: float
    history: list[IterationRecord]
    settles: bool = True  # else the last rung is left as soon as a step gains little
    lowering: bool = False  # the weight came from a coarser mesh, whose facets may have asked for too much
    levels: list[float] = field(default_factory=list)  # objective, freshly matched, since weights rose
    settling: bool = False
    settled_for: int = 0  # steps at the last weights
    idle: int = 0
    beside: Observations | None = None  # pulls beside the boundary's and the guides'
    given_weight: float = 0.0
    gain: float = 1.0  # relative decrease of the objective by the last step

    @property
    def forcing(self) -> float:
        """Relative residual of the next linear solve: loose while steps gain much, tight near rest."""
        return float(np.clip(np.sqrt(max(self.gain, 0.0)), TIGHTEST, LOOSEST))


def _weighted(o: Observations, factor: float) -> Observations:
    return o._replace(strengths=o.strengths * factor)


def _body_volume(surface: Surface) -> float:
    """What the faces towards the outside enclose, mm3 (divergence theorem)."""
    corners = surface.points[surface.triangles[surface.sides[:, 1] == 0]]
    a, b, c = np.moveaxis(corners - surface.points.mean(axis=0), 1, 0)
    return float(np.einsum("ij,ij->", np.cross(a, b), c) / 6.0)


class Climber:
    """The pieces a solve on one mesh needs."""

    def __init__(
        self,
        mesh: TetMesh,
        target: Surface,
        settings: MapSettings,
        *,
        alignment: Alignment,
        guides: LandmarkPairs | None,
        voxel_mm: float,
        facet_noise_mm: float = 0.0,
        kept: KeptBoundary | None = None,
    ) -> None:
        points, tets = np.array(mesh.points), np.array(mesh.tets)
        self.settings = settings
        declared = settings.uncertainty_mm or settings.uncertainty_voxels * voxel_mm
        self.uncertainty_mm = float(np.hypot(declared, facet_noise_mm))
        growth = _body_volume(target) / _body_volume(mesh.interfaces)
        self.contact = None
        if settings.one_to_one:
            self.contact = Contact(mesh.interfaces, reach_mm=settings.contact_voxels * voxel_mm)
        self.objective = Objective(points, tets, energy=settings.energy, contact=self.contact, growth=growth)
        steady, self.notes = steady_contacts(mesh.interfaces, target, alignment.matrix)
        patches = matching_patches(mesh.interfaces, target, steady)
        self.matcher = Matcher(
            patches, points, np.array(target.points), pattern=self.objective.pattern, across=settings.across
        )
        self.kept = kept
        self.guides = None
        self.guide_sd_mm = 0.0
        if guides is not None and guides.names:
            assert guides.sd_mm is not None
            self.guides = guide_observations(mesh, guides, pattern=self.objective.pattern)
            self.guide_sd_mm = float(np.sqrt(len(guides.sd_mm) / (guides.sd_mm**-2.0).sum()))
        self.unit = (0.02 * np.cbrt(_body_volume(target))) ** -2.0

    def pulls(self, state: State) -> tuple[Observations, Residual]:
        if self.contact is not None:
            self.contact.weight = max(state.boundary_weight, state.given_weight)
        matches, residual = self.matcher.match(state.images)
        if self.kept is not None:
            matches, residual = self.kept.beside(matches, state.images)
        parts = [_weighted(matches, state.boundary_weight)]
        if self.kept is not None:
            parts.append(_weighted(self.kept.pulls(state.images), state.given_weight))
        if self.guides is not None:
            parts.append(_weighted(self.guides, state.guide_weight))
        if state.beside is not None:
            parts.append(state.beside)
        return joined(parts), residual

    def boundary_reached(self, residual: Residual) -> bool:
        return residual.rms_mm <= self.uncertainty_mm and residual.rejected <= MOST_UNMATCHED

    def guides_reached(self, images: Floats) -> bool:
        return self.guides is None or guide_rms(self.guides, images) <= self.guide_sd_mm

    def given_kept(self, images: Floats) -> bool:
        return self.kept is None or self.kept.kept(images)

    @property
    def last_given_weight(self) -> float:
        """Where the weight of a given boundary stops rising: what needs a harder pull is given up."""
        assert self.kept is not None
        return HARDEST_PULL * float(np.sqrt(self.unit)) / self.kept.slack_mm

    def raise_given(self, state: State) -> bool:
        """Raise the weight of a given boundary that is not kept; False when there is nothing to raise."""
        if self.given_kept(state.images) or state.given_weight > 0.999 * self.last_given_weight:
            return False
        state.given_weight *= self.settings.weight_factor
        return True

    def ending(self, residual: Residual, images: Floats) -> Status:
        """How a solve that came to rest ended."""
        if not self.given_kept(images):
            return Status.GIVEN_BOUNDARY_NOT_KEPT
        reached = self.boundary_reached(residual) and self.guides_reached(images)
        return Status.SETTLED if reached else Status.BOUNDARY_NOT_REACHED

    def told_residual_mm(self, residual: Residual, images: Floats) -> float:
        """The residual for the record: of the given boundary and of what it does not speak of, together."""
        if self.kept is None:
            return residual.rms_mm
        return float(np.hypot(np.sqrt(self.kept.coverage) * self.kept.rms(images), residual.rms_mm))


def step(solver: Climber, state: State) -> tuple[float, Residual]:
    """Match, differentiate, move; returns the relative decrease of the objective and the residual before."""
    pulls, residual = solver.pulls(state)
    told_mm = solver.told_residual_mm(residual, state.images)
    before = solver.objective.differentiate(state.images, pulls)
    taken = solver.objective.descend(state.images, pulls, at=before, forcing=state.forcing)
    state.images = taken.images
    if solver.contact is not None:
        solver.contact.stiffen_if_blocked()
    state.levels.append(before.total)
    state.gain = decrease = (before.total - taken.value.total) / max(before.total, NOTHING)
    state.history.append(
        IterationRecord(
            len(state.history) + 1,
            state.boundary_weight,
            taken.value.total,
            taken.value.distortion,
            told_mm,
            taken.length,
            taken.iterations,
            taken.value.smallest_ratio,
            len(solver.objective.tets),
        )
    )
    state.idle = state.idle + 1 if taken.length < 1e-3 else 0
    return decrease, residual


def _raise_weights(solver: Climber, state: State, residual: Residual) -> bool:
    """Raise what is not inside its uncertainty yet; False when nothing is left to raise."""
    last = solver.settings.last_weight * solver.unit
    factor = solver.settings.weight_factor
    raised = False
    if not solver.boundary_reached(residual) and state.boundary_weight < 0.999 * last:
        state.boundary_weight = min(last, state.boundary_weight * factor)
        raised = True
    if not solver.guides_reached(state.images) and state.guide_weight < 99.9 * last:
        state.guide_weight *= factor
        raised = True
    raised = solver.raise_given(state) or raised
    if raised:
        state.levels, state.lowering = [], False
    return raised


def _lower_weight(solver: Climber, state: State, residual: Residual) -> bool:
    """Go down a rung where the boundary would be reached there too; False when it would not."""
    lower = state.boundary_weight / solver.settings.weight_factor
    inside = replace(residual, rms_mm=A_RUNG * residual.rms_mm)
    if lower < solver.settings.first_weight * solver.unit or not solver.boundary_reached(inside):
        return False
    state.boundary_weight, state.levels, state.settling = lower, [], False
    return True


def _lower_friction_of_creep(solver: Climber, state: State) -> None:
    """Let a body that still slides back along its boundary go, by less friction from here on.

    Less friction from the first step on would let nearly round bodies turn.
    """
    state.settled_for += 1
    if state.settled_for == CREEPING:
        solver.matcher.across *= LESS_FRICTION
        state.levels = []


def _at_rest(state: State, decrease: float, settle: float) -> bool:
    """True when a step gains nothing, or when new matches have eaten up the gain of several steps."""
    earlier, recent = state.levels[:-PLATEAU], state.levels[-PLATEAU:]
    if decrease < settle or not earlier:
        return decrease < settle
    return min(earlier) - min(recent) < PLATEAU * settle * min(earlier)


def climb(
    solver: Climber,
    state: State,
    progress: Progress,
    *,
    most_steps: int | None = None,
    watch: Watch | None = None,
) -> Status | None:
    """Newton steps up the ladder and down to rest; None when steps ran out or the watch says to give up."""
    settings = solver.settings
    on_rung = 0
    for _ in range(most_steps or settings.most_steps):
        decrease, residual = step(solver, state)
        on_rung += 1
        last = state.history[-1]
        note = f"boundary {last.residual_mm:.3f} mm, distortion {last.distortion:.4f}"
        progress("map", len(state.history), 0, note)
        if state.idle >= STALLED_STEPS:
            return Status.STALLED
        if state.lowering and on_rung > 1 and _lower_weight(solver, state, residual):
            on_rung = 0
            continue
        if state.settling:
            _lower_friction_of_creep(solver, state)
            if _at_rest(state, decrease, settings.settle):
                return solver.ending(residual, state.images)
        elif on_rung >= settings.steps_a_rung or decrease < 20 * settings.settle:
            on_rung = 0
            if watch is not None and watch(state.history):
                return None
            _, residual = solver.pulls(state)
            state.settling = not _raise_weights(solver, state, residual)
            if state.settling and not state.settles:
                return Status.SETTLED
    return None


def climbing_again(solver: Climber) -> Callable[[State], State]:
    """From a state to where a solve with the same weights settles; the state itself stays."""

    def again(state: State) -> State:
        further = replace(state, history=[], levels=[], settling=False, idle=0)
        climb(solver, further, silent, most_steps=STEPS_AGAIN)
        return further

    return again
