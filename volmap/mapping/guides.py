"""Guides: points of the source that the user says go to points of the target."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.blocksystem import Pattern
from volmap.kernels.observations import Observations
from volmap.mapping.holding import holding_tets
from volmap.types import InputError, LandmarkPairs, TetMesh


def refuse_far_guides(mesh: TetMesh, guides: LandmarkPairs, *, reach_mm: float) -> None:
    """Refuse guides that start farther than `reach_mm` outside the body.

    Raises
    ------
    InputError
    """
    _, _, gap_mm = holding_tets(mesh, guides.points)
    for row in np.flatnonzero(gap_mm > reach_mm):
        x, y, z = guides.points[row]
        raise InputError(
            "a guide lies outside the body it starts from",
            where=f"guide {guides.names[row]}",
            found=f"({x:.2f}, {y:.2f}, {z:.2f}) mm, {gap_mm[row]:.1f} mm away",
            expected="a point inside a label",
            remedy="correct its coordinates (RAS+ mm), swap the columns if it was given the other way "
            "round, or drop it",
            refused=True,
        )


def guide_observations(mesh: TetMesh, guides: LandmarkPairs, *, pattern: Pattern) -> Observations:
    """Pulls of the guides, strengths summing to one, weighted by 1 / sd^2.

    A guide outside the body is tied to the nearest tet, continued beyond its face.
    """
    tet, barycentric, _ = holding_tets(mesh, guides.points)
    assert guides.sd_mm is not None
    share = guides.sd_mm**-2.0
    normals = np.zeros((len(tet), 3))
    normals[:, 0] = 1.0
    return Observations(
        np.array(mesh.tets)[tet],
        barycentric,
        pattern.edge_of_tet[tet].astype(np.int64),
        np.array(guides.to_points),
        normals,
        share / share.sum(),
        np.ones(len(tet)),
    )


def guide_rms(observations: Observations, points: NDArray[np.float64]) -> float:
    """Root mean square distance of the guides from where they should be, in units of their sd ratio, mm."""
    placed = np.einsum("kc,kcd->kd", observations.weights, points[observations.corners])
    squared = ((placed - observations.anchors) ** 2).sum(axis=1)
    return float(np.sqrt((observations.strengths * squared).sum()))
