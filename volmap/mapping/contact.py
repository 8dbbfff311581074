"""The outer boundary's image must not cross itself: a barrier between its parts, and steps it allows."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barrier import add_barrier
from volmap.kernels.contact import (
    Pairs,
    longest_step,
    longest_step_of,
    near_pairs,
    remeasured,
    skin_of,
)
from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.ties import Ties
from volmap.types import Surface

Floats = NDArray[np.float64]

WATCHED_EDGES = 0.25  # how far the watch list looks beyond the barrier, as a share of a mean edge
BLOCKED = 0.25  # share of a step below which the barrier was too soft: it let parts come too near
STIFFER = 4.0  # by which it stiffens then, until steps are free again
STIFFEST = 1e6


def _farthest(a: Floats, b: Floats) -> float:
    return float(np.sqrt(((a - b) ** 2).sum(axis=1).max()))


class Contact:
    """Barrier on the image of a mesh's outer boundary.

    Pairs that are near are kept on a watch list (Verlet, Phys. Rev. 159, 1967); as long as no point has moved
    so far that another pair could matter, only the list is looked at.

    Parameters
    ----------
    surface : Surface
        Label surfaces of the source mesh; its faces towards the outside are the boundary.
    reach_mm : float
        Parts nearer than this repel each other.
    """

    def __init__(self, surface: Surface, *, reach_mm: float) -> None:
        outer = surface.triangles[surface.sides[:, 1] == 0]
        points = np.array(surface.points)
        self.skin = skin_of(points, outer)
        self.reach_mm = reach_mm
        self.weight = 0.0  # 1/mm2; follows the weight of the boundary matches
        self.stiffening = 1.0
        self._allowed = 1.0  # share of the last step on which no two parts met
        a, b = self.skin.edges[:, 0], self.skin.edges[:, 1]
        mean_edge = float(np.linalg.norm(points[a] - points[b], axis=1).mean())
        self._radius_mm = reach_mm + WATCHED_EDGES * mean_edge
        self._watched: tuple[Floats, Pairs] | None = None

    def _on_the_list(self, images: Floats, margin_mm: float) -> Pairs | None:
        """The watch list, when no other pair can come within the margin of the images; else None."""
        if self._watched is None:
            return None
        at, pairs = self._watched
        return pairs if 2 * _farthest(images, at) + margin_mm < self._radius_mm else None

    def _near(self, images: Floats) -> Pairs:
        listed = self._on_the_list(images, self.reach_mm)
        if listed is None:
            listed = near_pairs(self.skin, images, self._radius_mm)
            self._watched = images.copy(), listed
        return remeasured(listed, images, self.reach_mm)

    def energy(self, images: Floats) -> float:
        """The barrier at image points (n, 3) mm; infinite where parts touch."""
        return self.add(images, np.zeros_like(images))[0]

    def add(self, images: Floats, gradient: Floats) -> tuple[float, Ties]:
        """The barrier; its gradient is added to `gradient` (n, 3), its convex second derivative returned."""
        pairs = self._near(images)
        normals, stiffness = np.empty((len(pairs.corners), 3)), np.empty(len(pairs.corners))
        strength = self.stiffening * self.weight / len(self.skin.points)
        energy = add_barrier(pairs, self.reach_mm, strength, gradient, normals, stiffness)
        return float(energy), Ties(pairs.corners, pairs.weights, normals, stiffness)

    def stiffen_if_blocked(self) -> None:
        """Stiffen where contact cut the last step short (after the adaptive stiffness of Li et al.).

        While matches still pull over many times the reach, they press parts together against a barrier that
        is only as strong as a pull over the reach; each step then ends a little nearer to a contact, and the
        solve creeps.  Where no step is blocked nothing changes.
        """
        if self._allowed < BLOCKED:
            self.stiffening = min(STIFFER * self.stiffening, STIFFEST)

    def crosses(self, images: Floats) -> bool:
        """True when the image of the boundary crosses itself (exact signs)."""
        return len(triangle_crossings(images, self.skin.triangles)) > 0

    def longest_step(self, images: Floats, step: Floats) -> float:
        """Share in [0, 1] of a step (n, 3) mm on which no two parts meet."""
        listed = self._on_the_list(images, 2 * _farthest(images + step, images))
        if listed is not None:
            self._allowed = float(longest_step_of(listed, images, images + step))
        else:
            self._allowed = longest_step(self.skin, images, images + step)
        return self._allowed
