"""Improving a labelled complex without tangling it."""

from __future__ import annotations

import numpy as np

from volmap.kernels.labelfield import LabelField, Scratch, new_scratch
from volmap.kernels.relocate import relax, search, search_directions
from volmap.kernels.stars import new_stars
from volmap.kernels.strata import BACKGROUND, INTERIOR, Strata, point_normals
from volmap.mesh.labelled import Complex

GOOD = float(np.sin(np.radians(32.0)))  # a star this good may give some of it up for an even mesh
KEPT = float(np.sin(np.radians(18.0)))  # what re-projection leaves alone
SHARES = (1.0, 0.7)  # of the way to the mean, for inner and for interface points
# Searches one after another: stars worse than the angle are searched, and interface points may leave the tie
# by so much of a voxel.  The last ones serve the few stars that the strict ones cannot mend.
SEARCHES = ((20.0, 0.15), (20.0, 0.15), (16.0, 0.3), (16.0, 0.3), (16.0, 0.5), (16.0, 0.5))


def improved(
    field: LabelField, complex_: Complex, strata: Strata, *, sweeps: int, scratch: Scratch
) -> Complex:
    """The complex after some sweeps of smoothing and a search at the worst tets; tets and labels stay.

    The normals of `strata` are brought up to date in place.
    """
    stars = new_stars(*complex_)
    wish, place = np.zeros(3), np.zeros(3)
    for _ in range(sweeps):
        strata.normals[:] = point_normals(stars.points, strata.triangles)
        relax(field, stars, strata, GOOD, np.array(SHARES), wish, place, scratch)
    voxel_mm = float(field.spacing.min())
    directions, memory = search_directions(), np.zeros((3, 3))
    for bad_deg, slack_voxels in SEARCHES:
        strata.normals[:] = point_normals(stars.points, strata.triangles)
        bad, slack_mm = float(np.sin(np.radians(bad_deg))), slack_voxels * voxel_mm
        search(field, stars, strata, bad, slack_mm, directions, memory, scratch)
    return Complex(stars.points, complex_.tets, complex_.labels)


def on_ties(field: LabelField, complex_: Complex, strata: Strata, scratch: Scratch) -> Complex:
    """The complex with its interface points brought back to the ties of the field."""
    stars = new_stars(*complex_)
    strata.normals[:] = point_normals(stars.points, strata.triangles)
    relax(field, stars, strata, KEPT, np.zeros(2), np.zeros(3), np.zeros(3), scratch)
    return Complex(stars.points, complex_.tets, complex_.labels)


def smoothed_inside(complex_: Complex, strata: Strata) -> Complex:
    """The complex with the inner points around its worst tets searched for better places; all others stay."""
    inner = strata._replace(kind=np.where(strata.kind == INTERIOR, INTERIOR, BACKGROUND))
    field = LabelField(np.zeros((1, 1, 1), np.uint16), np.ones(3), np.ones(3), np.zeros(1))
    return improved(field, complex_, inner, sweeps=2, scratch=new_scratch())
