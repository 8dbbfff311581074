"""Look at where landmark pairs lie before a map is built on them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from volmap.screen.results import by_gravity
from volmap.types.findings import Finding, Level
from volmap.types.landmarks import LandmarkPairs
from volmap.types.volumes import LabelVolume

FAR_VOXELS = 2.0  # from the centre of the nearest labelled voxel; common practice, no source


def screen_pairs_of_landmarks(
    pairs: LandmarkPairs, source: LabelVolume, target: LabelVolume, *, name: str
) -> tuple[Finding, ...]:
    """Landmarks that lie clearly outside the bodies they belong to, on either side.

    A guide there is refused; a check landmark is warned of, because the map is not defined there.  The
    usual reasons are another frame (LPS), another unit, or the two sides swapped.  Landmarks near the
    boundary are left for the mesh to judge.

    Parameters
    ----------
    pairs : LandmarkPairs
    source, target : LabelVolume
    name : str
        File name of the pairs.
    """
    findings = []
    for volume, points in ((source, pairs.points), (target, pairs.to_points)):
        apart = distance_to_body(volume, points)
        limit = FAR_VOXELS * float(volume.grid.spacing.max())
        for i in np.flatnonzero(apart > limit).tolist():
            level = Level.REFUSE if pairs.roles[i] == "guide" else Level.WARN
            place = ", ".join(f"{v:.1f}" for v in points[i])
            sentence = f"({place}) mm is outside the body of {volume.name}, {apart[i]:.3g} mm from it"
            remedy = "correct its coordinates (RAS+ mm), swap the sides if they are exchanged, or drop it"
            findings.append(Finding(level, "landmark_outside", f"{name}, {pairs.names[i]}", sentence, remedy))
    return by_gravity(findings)


def distance_to_body(volume: LabelVolume, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n,) distance from each point to the centre of the nearest labelled voxel, mm; inf without labels."""
    inside = volume.labels > 0
    core = np.zeros(inside.shape, bool)
    core[1:-1, 1:-1, 1:-1] = inside[1:-1, 1:-1, 1:-1]
    for axis in range(3):
        for step in (-1, 1):
            core &= np.roll(inside, step, axis)
    apart = np.full(len(points), np.inf)
    if not inside.any():
        return apart
    index = np.rint(volume.grid.to_index(points)).astype(np.int64)
    held = np.asarray(((index >= 0) & (index < inside.shape)).all(axis=1), bool)
    deep = np.zeros(len(points), bool)
    deep[held] = core[tuple(index[held].T)]
    rind = volume.grid.to_world(np.argwhere(inside & ~core).astype(np.float64))
    nearest, _ = cKDTree(rind).query(points)
    apart[:] = np.where(deep, 0.0, nearest)
    return apart
