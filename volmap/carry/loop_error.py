"""Maps that lead back to where they start, and how far from it they arrive.

A loop error speaks of agreement, not of truth.  Where it is large, at least one map of the loop is wrong.
Where it is small the maps agree, and may be wrong together: the identity, or any maps that make one mistake
and its reverse, close every loop.  Consistency, like overlap, cannot tell an accurate map from a wrong one
(Rohlfing, IEEE Trans. Med. Imaging 31(2), 2012).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.carry.points import move_points
from volmap.carry.sampling import places_throughout
from volmap.types import InputError, MapChain
from volmap.types.map_chain import joined, named

Floats = NDArray[np.float64]
N_EVEN = 20_000  # places spread by volume: 1,000 of them lie beyond the 95th percentile


@dataclass(frozen=True, eq=False)
class LoopError:
    """How far from where they started the places of a body come home.

    Parameters
    ----------
    places, homes : (n, 3) float64, mm, RAS+
        All points of the first map's mesh, a centroid a tet, then places spread evenly by volume; and where
        they come back to, NaN where a place lost its way.
    outside_mm : (n,) float64
        The farthest that a place was outside a body it went through; 0 when it was inside all of them.
    n_even : int
        How many of the places, the last ones, are spread evenly by volume.
    """

    places: Floats
    homes: Floats
    outside_mm: Floats
    n_even: int

    @property
    def distance_mm(self) -> Floats:
        """(n,) between each place and its home; NaN where it has none."""
        return np.asarray(np.linalg.norm(self.homes - self.places, axis=1))

    @property
    def returned(self) -> NDArray[np.bool_]:
        """(n,) True where a place came home."""
        return ~np.isnan(self.homes[:, 0])

    @property
    def mean_mm(self) -> float:
        """Mean over the part of the body that came home; NaN when nothing did."""
        even = self._even_mm
        return float(even.mean()) if len(even) else float("nan")

    @property
    def p95_mm(self) -> float:
        """95th percentile over that part."""
        even = self._even_mm
        return float(np.percentile(even, 95)) if len(even) else float("nan")

    @property
    def max_mm(self) -> float:
        """The largest of all places, the points of the mesh included."""
        return float(np.nanmax(self.distance_mm)) if self.returned.any() else float("nan")

    @property
    def worst_mm(self) -> tuple[float, float, float]:
        """The place with the largest distance, world mm, RAS+."""
        if not self.returned.any():
            return (float("nan"),) * 3
        x, y, z = self.places[int(np.nanargmax(self.distance_mm))]
        return float(x), float(y), float(z)

    @property
    def defined(self) -> float:
        """Part of the body's volume that came home, inside every body on the way."""
        even = slice(len(self.places) - self.n_even, None)
        return float((self.returned & (self.outside_mm == 0))[even].mean())

    @property
    def continued(self) -> float:
        """Part of the volume that came home, but was a little outside a body on the way."""
        even = slice(len(self.places) - self.n_even, None)
        return float((self.returned & (self.outside_mm > 0))[even].mean())

    @property
    def _even_mm(self) -> Floats:
        distance = self.distance_mm[len(self.places) - self.n_even :]
        return distance[~np.isnan(distance)]


def loop_error(loop: MapChain, *, reach_mm: float, n_random: int = N_EVEN, seed: int = 0) -> LoopError:
    """Send places of the first map's body round a loop.

    Parameters
    ----------
    loop : MapChain
        At least two maps; the last one ends in the scan in which the first one starts.
    reach_mm : float
        A place may be this far outside the body of a map on its way: two maps of one scan have bodies that
        differ by what the boundaries were missed by.
    n_random : int
        Places spread evenly by volume.
    seed : int
        Same seed, same places.

    Raises
    ------
    InputError
        One map alone; maps that do not lead back.
    """
    if len(loop.maps) < 2:
        raise InputError("a loop needs at least two maps", found="one")
    if not joined(loop.maps[-1], loop.maps[0]):
        raise InputError(
            "the maps do not lead back to where they start",
            found=f"an end in {named(loop.target, loop.target_sha256)}",
            expected=f"one in {named(loop.source, loop.source_sha256)}",
            remedy="name a map that closes the loop, in either direction",
            refused=True,
        )
    places, images = places_throughout(loop.maps[0], n_random=n_random, seed=seed)
    moved = move_points(MapChain(loop.maps[1:]), images, reach_mm=reach_mm)
    return LoopError(places, moved.points, moved.outside_mm, n_random)
