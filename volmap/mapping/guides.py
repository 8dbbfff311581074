"""Guides: points of the source that the user says go to points of the target."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import locate
from volmap.kernels.blocksystem import Pattern
from volmap.kernels.observations import Observations
from volmap.types import InputError, LandmarkPairs, TetMesh


def guide_observations(mesh: TetMesh, guides: LandmarkPairs, *, pattern: Pattern) -> Observations:
    """Pulls of the guides, strengths summing to one, weighted by 1 / sd^2.

    Raises
    ------
    InputError
        A guide lies outside the source body.
    """
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    tet, barycentric = locate.locate(
        locate.build_buckets(points, tets), points, tets, np.array(guides.points)
    )
    for name, place, where in zip(guides.names, guides.points, tet, strict=True):
        if where < 0:
            raise InputError(
                "a guide lies outside the body it starts from",
                where=f"guide {name}",
                found=f"({place[0]:.2f}, {place[1]:.2f}, {place[2]:.2f}) mm",
                expected="a point inside a label",
                remedy="correct its coordinates (RAS+ mm), swap the columns if it was given the other way "
                "round, or drop it",
                refused=True,
            )
    assert guides.sd_mm is not None
    share = guides.sd_mm**-2.0
    normals = np.zeros((len(tet), 3))
    normals[:, 0] = 1.0
    return Observations(
        tets[tet],
        barycentric,
        pattern.edge_of_tet[tet],
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
