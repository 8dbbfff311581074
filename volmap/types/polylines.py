"""Lines through points, in order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite


@dataclass(frozen=True, eq=False)
class Polylines(Frozen):
    """Lines of straight segments: fibres, centrelines, contours (which end where they begin).

    Parameters
    ----------
    names : tuple of str
        One a line, none twice.
    points : (n, 3) float64, mm, RAS+
        Of all lines, one line after the other.
    starts : (k + 1,) int64
        Line i is ``points[starts[i] : starts[i + 1]]``; two points a line at least.

    Raises
    ------
    InputError
        Lengths that do not fit, a line of one point, a name twice, points that are not finite.
    """

    names: tuple[str, ...]
    points: NDArray[np.float64]
    starts: NDArray[np.int64]

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        starts = self._own("starts", np.int64, (None,))
        require_finite(points, "Polylines.points")
        object.__setattr__(self, "names", tuple(self.names))
        if len(starts) != len(self.names) + 1 or starts[0] != 0 or starts[-1] != len(points):
            raise InputError("lines and points do not fit", where="Polylines.starts")
        short = np.flatnonzero(np.diff(starts) < 2)
        if len(short):
            raise InputError(
                "a line has fewer than two points", where=f"line {self.names[short[0]]}",
                remedy="single points are landmarks",
            )  # fmt: skip
        if len(set(self.names)) < len(self.names):
            raise InputError("two lines have the same name", where="Polylines.names")

    @property
    def segments(self) -> NDArray[np.int64]:
        """(s,) the point each segment starts at, ascending; the next point is its end."""
        starts_one = np.ones(len(self.points), bool)
        starts_one[self.starts[1:] - 1] = False
        return np.flatnonzero(starts_one)

    @property
    def line_of_point(self) -> NDArray[np.int64]:
        """(n,) which line each point belongs to."""
        return np.repeat(np.arange(len(self.names)), np.diff(self.starts))

    @property
    def lengths_mm(self) -> NDArray[np.float64]:
        """(k,) length of each line, mm."""
        first = self.segments
        pieces = np.linalg.norm(self.points[first + 1] - self.points[first], axis=1)
        return np.asarray(np.bincount(self.line_of_point[first], pieces, len(self.names)), np.float64)

    def lines(self, kept: NDArray[np.bool_]) -> Polylines:
        """Some of the lines, in their order."""
        return Polylines(
            tuple(name for name, keep in zip(self.names, kept, strict=True) if keep),
            self.points[kept[self.line_of_point]],
            np.concatenate([[0], np.cumsum(np.diff(self.starts)[kept])]),
        )
