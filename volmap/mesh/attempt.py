"""One attempt at a mesh: lattice, improvement, volumes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from volmap.kernels.labelfield import LabelField, new_scratch
from volmap.kernels.lattice import oriented, used_only
from volmap.kernels.strata import Strata, new_strata
from volmap.mesh.improve import improved
from volmap.mesh.labelled import Complex, labelled_lattice
from volmap.mesh.pinned import freed
from volmap.mesh.prepare import Prepared, Targets, targets
from volmap.mesh.volumes import fitted, label_volumes
from volmap.types.errors import InputError
from volmap.types.progress import Progress
from volmap.types.tetmesh import TetMesh

STEPS = 6
FIRST_SWEEPS, LATER_SWEEPS = 5, 3
LAST_ROUNDS = 3
ENOUGH = 0.002  # relative volume error that ends the last rounds


@dataclass(frozen=True)
class Rung:
    """How one attempt is made: edge in mm, width of the spline in voxels, times edges may be halved."""

    edge_mm: float
    smoothing_voxels: float
    refine: int


@dataclass(frozen=True, eq=False)
class Attempt:
    """What came of a rung.

    Attributes
    ----------
    rung : Rung
    mesh : TetMesh
    targets : Targets
    specks : int
        Pieces of the lattice that were too small to keep.
    """

    rung: Rung
    mesh: TetMesh
    targets: Targets
    specks: int


def attempted(prepared: Prepared, rung: Rung, progress: Progress, *, name: str) -> Attempt:
    """Mesh a prepared volume once.

    Raises
    ------
    InputError
        When nothing of the body is large enough for the lattice.
    """
    field, scratch = prepared.field(rung.smoothing_voxels), new_scratch()
    wanted = targets(prepared, rung.edge_mm)
    progress("mesh", 1, STEPS, f"lattice with edges of {rung.edge_mm:.3g} mm")
    complex_, n_specks = labelled_lattice(field, rung.edge_mm, refine=rung.refine, scratch=scratch)
    if not (complex_.labels > 0).any():
        raise _too_small(name, rung)
    progress("mesh", 2, STEPS, "moving points")
    strata = new_strata(*complex_)
    complex_ = improved(field, complex_, strata, sweeps=FIRST_SWEEPS, scratch=scratch)
    progress("mesh", 3, STEPS, "inner points for pinned tets")
    complex_ = freed(complex_)
    strata = new_strata(*complex_)
    complex_ = _with_volumes(field, complex_, strata, wanted, progress)
    progress("mesh", STEPS, STEPS, "done")
    return Attempt(rung, _in_world(prepared, complex_), wanted, n_specks)


def _with_volumes(
    field: LabelField, complex_: Complex, strata: Strata, wanted: Targets, progress: Progress
) -> Complex:
    """Fit volumes and improve in turn, until both hold."""
    scratch, asked = new_scratch(), wanted.volume_mm3
    progress("mesh", 4, STEPS, "volumes")
    field, complex_ = fitted(field, complex_, strata, wanted_mm3=asked, rounds=3, scratch=scratch)
    complex_ = improved(field, complex_, strata, sweeps=LATER_SWEEPS, scratch=scratch)
    progress("mesh", 5, STEPS, "volumes")
    for _ in range(LAST_ROUNDS):
        field, complex_ = fitted(field, complex_, strata, wanted_mm3=asked, rounds=2, scratch=scratch)
        complex_ = improved(field, complex_, strata, sweeps=0, scratch=scratch)
        volumes = label_volumes(complex_, len(asked))
        there = (volumes > 0) & (np.arange(len(asked)) > 0)
        if (np.abs(volumes - asked)[there] <= ENOUGH * asked[there]).all():
            break
    return complex_


def _in_world(prepared: Prepared, complex_: Complex) -> TetMesh:
    """The body without its ring, in world mm, tets positive."""
    body = complex_.labels > 0
    points, tets, _ = used_only(complex_.points, complex_.tets[body])
    points = prepared.to_world(points)
    return TetMesh(points, oriented(points, tets), prepared.label_ids[complex_.labels[body]])


def _too_small(name: str, rung: Rung) -> InputError:
    return InputError(
        "no part of the body is large enough for the lattice",
        where=name,
        found=f"edges of {rung.edge_mm:.3g} mm",
        expected="edges shorter than the body is thick",
        remedy="ask for a shorter edge",
        refused=True,
    )
