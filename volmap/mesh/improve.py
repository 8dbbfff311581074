"""Improving a labelled complex without tangling it."""

from __future__ import annotations

import numpy as np

from volmap.kernels.labelfield import LabelField, Scratch
from volmap.kernels.relocate import reproject, search, search_directions, smooth
from volmap.kernels.stars import new_stars
from volmap.kernels.strata import Strata, point_normals
from volmap.mesh.labelled import Complex

GOOD = float(np.sin(np.radians(32.0)))  # a star this good may give some of it up for an even mesh
BAD = float(np.sin(np.radians(20.0)))  # stars worse than this are searched for something better
KEPT = float(np.sin(np.radians(18.0)))  # what re-projection leaves alone
SHARE = 0.7  # of the way to the mean, for interface points
SEARCH_ROUNDS = 2
SLACK_VOXELS = 0.15  # how far a search may take an interface point from the tie


def improved(
    field: LabelField, complex_: Complex, strata: Strata, *, sweeps: int, scratch: Scratch
) -> Complex:
    """The complex after some sweeps of smoothing and a search at the worst tets; tets and labels stay.

    The normals of `strata` are brought up to date in place.
    """
    stars = new_stars(*complex_)
    shift, place = np.zeros(3), np.zeros(3)
    for _ in range(sweeps):
        strata.normals[:] = point_normals(stars.points, strata.triangles)
        smooth(field, stars, strata, GOOD, SHARE, shift, place, scratch)
    slack_mm = SLACK_VOXELS * float(field.spacing.min())
    directions, memory = search_directions(), np.zeros((3, 3))
    for _ in range(SEARCH_ROUNDS):
        strata.normals[:] = point_normals(stars.points, strata.triangles)
        if search(field, stars, strata, BAD, slack_mm, directions, memory, scratch) == 0:
            break
    return Complex(stars.points, complex_.tets, complex_.labels)


def on_ties(field: LabelField, complex_: Complex, strata: Strata, scratch: Scratch) -> Complex:
    """The complex with its interface points brought back to the ties of the field."""
    stars = new_stars(*complex_)
    strata.normals[:] = point_normals(stars.points, strata.triangles)
    reproject(field, stars, strata, KEPT, np.zeros(3), np.zeros(3), scratch)
    return Complex(stars.points, complex_.tets, complex_.labels)
