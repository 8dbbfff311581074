"""Two maps of one pair, solved on either body's mesh, drawn together into one map and its inverse.

Solved on the mesh of A, a map differs from the inverse of the one solved on the mesh of B: mostly by sliding
along the boundary, within a few edges, where either mesh makes something else of the voxels' noise.  Here
each of the two minimises its own objective plus the squared distance from the middle of both; then the middle
is found anew.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest
from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.observations import towards
from volmap.kernels.topology import face_corners, match_faces
from volmap.mapping.climbing import step
from volmap.mapping.matching import Residual
from volmap.mapping.solve import Solved
from volmap.types import IterationRecord, Progress, Status, TetMesh, VolumeMap, silent

Floats = NDArray[np.float64]

DRAW = 0.3  # weight of the distance from the middle, in the units of the boundary's weight
STEPS_A_SWEEP = 3  # Newton steps towards one middle
FEWEST_SWEEPS, MOST_SWEEPS = 2, 12
AT_REST = 20.0  # times `settle`: what the first step after a new middle may still gain
FARTHEST_VOXELS = 1.0  # mean difference beyond which the two are two answers, not one


class Coupling(Enum):
    """Whether two maps were drawn together; each member is a sentence, or nothing when they were."""

    DRAWN = ""
    UNFINISHED = "The solves on the two meshes were not drawn together, because one of them stopped early."
    TOO_FAR = (
        "The solves on the two meshes were not drawn together, because they differ by more than a voxel on "
        "average: they are two answers, and another start or guides should decide."
    )
    BOUNDARY_LOST = (
        "The solves on the two meshes were not drawn together, because that would have left a boundary "
        "outside its declared uncertainty."
    )


@dataclass(frozen=True, eq=False)
class Coupled:
    """Both solves of a pair after coupling.

    Parameters
    ----------
    main, other : Solved
        Drawn together, or as they were.
    how : Coupling
    """

    main: Solved
    other: Solved
    how: Coupling


class _Inverse:
    """The inverse of a mesh's map, continued a little beyond the image of the mesh."""

    def __init__(self, mesh: TetMesh) -> None:
        self.points, self.tets = np.array(mesh.points), np.array(mesh.tets)
        _, _, hull = match_faces(self.tets)
        self.faces, self.owners = np.ascontiguousarray(face_corners(self.tets, hull)), hull // 4

    def __call__(self, images: Floats, queries: Floats) -> Floats:
        """(q, 3) where points of the image world come from, mm.

        A point outside the image of the mesh is carried by the tet behind the nearest face of its hull.
        """
        tet, where_in = locate(build_buckets(images, self.tets), images, self.tets, queries)
        out = np.flatnonzero(tet < 0)
        if len(out):
            beyond = np.ascontiguousarray(queries[out])
            tree = closest.build_tree(images, self.faces)
            face, _, _ = closest.closest(tree, images, self.faces, beyond)
            tet[out] = self.owners[face]
            corners = images[self.tets[tet[out]]]
            edges = np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2)
            rest = np.linalg.solve(edges, (beyond - corners[:, 0])[:, :, None])[:, :, 0]
            where_in[out] = np.column_stack([1.0 - rest.sum(axis=1), rest])
        return interpolate(self.tets, self.points, tet, where_in)


class _Side:
    """One of the two maps while it is drawn."""

    def __init__(self, solved: Solved) -> None:
        mesh = solved.outcome.map.mesh
        self.solver, self.settings = solved.solver, solved.solver.settings
        self.solver.objective.multigrid.forget()
        self.inverse = _Inverse(mesh)
        self.points = self.inverse.points
        shares = np.bincount(mesh.tets.ravel(), np.repeat(mesh.volumes, 4), len(mesh.points))
        self.shares = shares / shares.sum()
        self.state = replace(solved.state, levels=[], history=list(solved.state.history), settling=True)
        self.residual: Residual | None = None

    @property
    def rung(self) -> float:
        """The weight of the boundary in its own unit, which both bodies have in common."""
        return float(self.state.boundary_weight / self.solver.unit)

    @property
    def images(self) -> Floats:
        return self.state.images

    def draw(self, middle: Floats, rung: float) -> float:
        """Newton steps towards a middle (n, 3) mm; the relative gain of the first one."""
        self.state.boundary_weight = rung * self.solver.unit
        self.state.beside = towards(middle, DRAW * self.solver.unit * self.shares)
        gains = []
        for _ in range(STEPS_A_SWEEP):
            gain, _ = step(self.solver, self.state)
            gains.append(gain)
            if gain < self.settings.settle:
                break
        self.state.beside = None
        self.residual = self.solver.pulls(self.state)[1]
        return gains[0]

    @property
    def matched(self) -> bool:
        """Boundary matches and guides are inside their uncertainty."""
        assert self.residual is not None
        inside = self.solver.boundary_reached(self.residual)
        return inside and self.solver.guides_reached(self.images)

    @property
    def reached(self) -> bool:
        assert self.residual is not None
        return self.solver.ending(self.residual, self.images) is Status.SETTLED

    def ended(self, solved: Solved) -> Solved:
        assert self.residual is not None
        status = self.solver.ending(self.residual, self.images)
        history: tuple[IterationRecord, ...] = tuple(self.state.history)
        there = VolumeMap(solved.outcome.map.mesh, self.images)
        outcome = replace(solved.outcome, map=there, status=status, history=history)
        return replace(solved, outcome=outcome, state=self.state)


def _parted(sides: tuple[_Side, _Side]) -> tuple[Floats, Floats]:
    """Where the inverse of each other's map takes the points of either mesh."""
    here, there = sides
    return there.inverse(there.images, here.points), here.inverse(here.images, there.points)


def couple(main: Solved, other: Solved, *, voxel_mm: float, progress: Progress = silent) -> Coupled:
    """Draw two solves of one pair together, every tet positive and the boundaries free of crossings.

    Both boundaries get one weight: the smaller one of the two, raised while a residual is outside the
    declared uncertainty.  Where that would lose a boundary that was reached, nothing is changed.

    Parameters
    ----------
    main, other : Solved
        From A's mesh into B and from B's mesh into A.
    voxel_mm : float
        "One voxel" as a length.
    progress : Progress

    Returns
    -------
    Coupled
    """
    settled = (Status.SETTLED, Status.BOUNDARY_NOT_REACHED, Status.GIVEN_BOUNDARY_NOT_KEPT)
    if not all(s.outcome.status in settled for s in (main, other)):
        return Coupled(main, other, Coupling.UNFINISHED)
    sides = (_Side(main), _Side(other))
    parted = _parted(sides)
    gaps = [
        float(side.shares @ np.linalg.norm(side.images - end, axis=1))
        for side, end in zip(sides, parted, strict=True)
    ]
    if max(gaps) > FARTHEST_VOXELS * voxel_mm:
        return Coupled(main, other, Coupling.TOO_FAR)
    _draw(sides, parted, progress)
    for side, before in zip(sides, (main, other), strict=True):
        if before.outcome.status is Status.SETTLED and not side.reached:
            return Coupled(main, other, Coupling.BOUNDARY_LOST)
    return Coupled(sides[0].ended(main), sides[1].ended(other), Coupling.DRAWN)


def _draw(sides: tuple[_Side, _Side], parted: tuple[Floats, Floats], progress: Progress) -> None:
    """Sweeps until new middles change little and the boundaries are inside their uncertainty."""
    settings = sides[0].settings
    rung, top = min(side.rung for side in sides), settings.last_weight
    for sweep in range(MOST_SWEEPS):
        middles = [0.5 * (side.images + end) for side, end in zip(sides, parted, strict=True)]
        gains = [side.draw(middle, rung) for side, middle in zip(sides, middles, strict=True)]
        progress("couple", sweep + 1, 0)
        if sweep + 1 >= FEWEST_SWEEPS:
            matched = all(side.matched for side in sides)
            harder = [side.solver.raise_given(side.state) for side in sides]
            if not matched and rung < 0.999 * top:
                rung = min(top, rung * np.sqrt(settings.weight_factor))
            elif max(gains) < AT_REST * settings.settle and not any(harder):
                return
        parted = _parted(sides)
