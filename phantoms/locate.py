"""Which tetrahedron a point lies in."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

CHUNK = 20_000  # points looked up at a time; bounds memory


@dataclass(eq=False)
class TetLocator:
    """Point location by a grid of buckets that lists, in each cell, the tets whose box meets it.

    Parameters
    ----------
    points : (n, 3) float64, mm
    tets : (m, 4) int64
        None degenerate.
    """

    points: NDArray[np.float64]
    tets: NDArray[np.int64]
    _origin: NDArray[np.float64] = field(init=False, repr=False)
    _size: float = field(init=False, repr=False)
    _shape: NDArray[np.int64] = field(init=False, repr=False)
    _first: NDArray[np.int64] = field(init=False, repr=False)
    _listed: NDArray[np.int64] = field(init=False, repr=False)
    _inverse: NDArray[np.float64] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        corners = self.points[self.tets]
        low, high = corners.min(axis=1), corners.max(axis=1)
        self._inverse = np.asarray(
            np.linalg.inv(np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2)), np.float64
        )
        self._origin = low.min(axis=0) - 1e-6
        self._size = 0.5 * float((high - low).mean())
        self._shape = np.floor((high.max(axis=0) - self._origin) / self._size).astype(np.int64) + 1
        first_cell = np.floor((low - self._origin) / self._size).astype(np.int64)
        last_cell = np.floor((high - self._origin) / self._size).astype(np.int64)
        tet, cell = _spread(first_cell, last_cell, self._shape)
        order = np.argsort(cell, kind="stable")
        self._listed = tet[order]
        counts = np.bincount(cell, minlength=int(np.prod(self._shape)))
        self._first = np.concatenate([[0], np.cumsum(counts)])

    def find(self, points: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """The tet of each point and its barycentric coordinates there.

        Parameters
        ----------
        points : (n, 3) float64, mm
            NaN rows are outside.

        Returns
        -------
        tet : (n,) int64
            -1 outside.
        weights : (n, 4) float64
            NaN outside.
        """
        tet = np.full(len(points), -1, np.int64)
        weights = np.full((len(points), 4), np.nan)
        for start in range(0, len(points), CHUNK):
            part = slice(start, start + CHUNK)
            tet[part], weights[part] = self._find_chunk(points[part])
        return tet, weights

    def _find_chunk(self, points: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        tet = np.full(len(points), -1, np.int64)
        weights = np.full((len(points), 4), np.nan)
        with np.errstate(invalid="ignore"):
            place = np.floor((points - self._origin) / self._size)
            inside = ((place >= 0) & (place < self._shape)).all(axis=1)
        near = np.flatnonzero(inside)
        cell = np.ravel_multi_index(tuple(place[near].astype(np.int64).T), tuple(self._shape))
        counts = self._first[cell + 1] - self._first[cell]
        query = np.repeat(near, counts)
        offset = np.arange(len(query)) - np.repeat(np.cumsum(counts) - counts, counts)
        candidate = self._listed[np.repeat(self._first[cell], counts) + offset]
        local = points[query] - self.points[self.tets[candidate, 0]]
        bary = np.einsum("nij,nj->ni", self._inverse[candidate], local)
        bary = np.concatenate([1 - bary.sum(axis=1, keepdims=True), bary], axis=1)
        good = np.flatnonzero(bary.min(axis=1) >= -1e-9)
        tet[query[good]], weights[query[good]] = candidate[good], bary[good]
        return tet, weights


def _spread(
    first: NDArray[np.int64], last: NDArray[np.int64], shape: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Every (box, flat cell) pair of boxes of cells given by their first and last cell."""
    extent = last - first + 1
    counts = extent.prod(axis=1)
    box = np.repeat(np.arange(len(first)), counts)
    rank = np.arange(len(box)) - np.repeat(np.cumsum(counts) - counts, counts)
    k = rank % extent[box, 2]
    j = rank // extent[box, 2] % extent[box, 1]
    i = rank // (extent[box, 2] * extent[box, 1])
    cell = first[box] + np.stack([i, j, k], axis=1)
    return box, np.ravel_multi_index(tuple(cell.T), tuple(shape))
