"""A given boundary: pulls that keep the boundary of a mesh where a surface map from elsewhere sends it.

Of all maps that keep every point the surface speaks of within the tolerance of its given place, the least
distorted one is wanted.  So a point pulls only by what it lies outside its ball: the energy of a point at
distance d is ``strength (d - zone)^2`` beyond the zone and nothing inside it, with a zone slightly smaller
than the tolerance, and the weight rises until no point is outside its tolerance.  The strengths are shares of
the boundary's area.  Second derivatives are exact: the whole strength acts along the deviation, and the share
``1 - zone / d`` of it across.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.observations import Observations
from volmap.mapping.alignment import Alignment
from volmap.mapping.fits import fit_affine, fit_rigid
from volmap.mapping.matching import Residual
from volmap.mapping.patches import areas
from volmap.types import GivenBoundary, InputError, TetMesh

Floats = NDArray[np.float64]

ZONE = 0.9  # of the tolerance, inside which nothing pulls
EXACT = 0.1  # of the tolerance, within which a point counts as exactly where it is given to go
MOSTLY = 0.5  # share of the outer boundary from which on the correspondence alone says how the bodies lie


class KeptBoundary:
    """What a given boundary says of a mesh's points, as pulls.

    Parameters
    ----------
    mesh : TetMesh
    given : GivenBoundary
        From the mesh's world.

    Raises
    ------
    InputError
        It speaks of no part of the mesh's boundary.
    """

    def __init__(self, mesh: TetMesh, given: GivenBoundary) -> None:
        surface = mesh.interfaces
        spoken = given.spoken_of(surface)
        if not len(spoken.rows):
            raise InputError(
                "speaks of no part of the body's boundary",
                where=given.name,
                expected=f"a surface within {given.reach_mm:.3g} mm of it",
                remedy="check its frame (RAS+ mm) and that it belongs to SOURCE",
                refused=True,
            )
        self.rows, self.anchors = spoken.rows, spoken.anchors
        self.share = spoken.area / spoken.area.sum()
        self.covered = np.zeros(len(mesh.points), bool)
        self.covered[self.rows] = True
        area = areas(surface.points, surface.triangles) * (surface.sides[:, 1] == 0)
        self.coverage = float(area[spoken.covered].sum() / area.sum())
        self.tolerance_mm = given.tolerance_mm  # may be changed between solves
        self._exact_mm = EXACT * given.tolerance_mm
        self._start = np.array(mesh.points)[self.rows]

    def start(self) -> Alignment:
        """The affine (rigid, where little is spoken of) that fits the correspondence best."""
        fit = fit_affine if self.coverage >= MOSTLY else fit_rigid
        matrix = fit(self._start, self.anchors, self.share)
        gap = self._start @ matrix[:3, :3].T + matrix[:3, 3] - self.anchors
        return Alignment("given boundary", matrix, float(np.sqrt(self.share @ (gap**2).sum(axis=1))))

    def deviations(self, images: Floats) -> Floats:
        """(k,) how far the points lie from where they are given to go, mm."""
        return np.asarray(np.linalg.norm(images[self.rows] - self.anchors, axis=1))

    def rms(self, images: Floats) -> float:
        """Root mean square deviation by area, mm."""
        return float(np.sqrt(self.share @ self.deviations(images) ** 2))

    @property
    def slack_mm(self) -> float:
        """How far beyond the zone a point may still end."""
        return self.tolerance_mm * (1 - ZONE) if self.tolerance_mm > 0 else self._exact_mm

    def kept(self, images: Floats) -> bool:
        """True when no point lies outside its tolerance."""
        return bool(self.deviations(images).max() <= max(self.tolerance_mm, self._exact_mm))

    def pulls(self, images: Floats) -> Observations:
        """The pulls at image points (n, 3) mm."""
        k = len(self.rows)
        deviation = images[self.rows] - self.anchors
        distance = np.linalg.norm(deviation, axis=1)
        zone = ZONE * self.tolerance_mm
        outside = distance > zone
        safe = np.where(distance > 0, distance, 1.0)
        normals = np.where((distance > 0)[:, None], deviation / safe[:, None], [1.0, 0.0, 0.0])
        corners, weights = np.zeros((k, 4), np.int64), np.zeros((k, 4))
        corners[:, 0], weights[:, 0] = self.rows, 1.0
        return Observations(
            corners,
            weights,
            np.full((k, 6), -1),
            self.anchors + zone * normals,
            normals,
            np.where(outside | (zone == 0), self.share, 0.0),
            np.clip(1.0 - zone / safe, 0.0, 1.0) if zone > 0 else np.ones(k),
        )

    def beside(self, matches: Observations, images: Floats) -> tuple[Observations, Residual]:
        """Matches with the target's surface for what is not spoken of, and their residual.

        The residual is the mean over the whole boundary, as without a given one; what is spoken of counts as
        reached, for `kept` looks after it.
        """
        spoken = (self.covered[matches.corners] | (matches.weights == 0)).all(axis=1)
        left = np.where(spoken, 0.0, matches.strengths)
        free = matches._replace(strengths=left)
        rejected = float(((left == 0) & ~spoken).mean())
        if not left.any():
            return free, Residual(0.0, 0.0, 0.0, rejected)
        placed = np.einsum("kc,kcd->kd", matches.weights, images[matches.corners])
        distance = np.linalg.norm(placed - matches.anchors, axis=1)
        share = left / matches.strengths.sum()
        return free, Residual(
            float(np.sqrt(share @ distance**2)),
            float(share @ distance),
            float(distance[left > 0].max()),
            rejected,
        )
