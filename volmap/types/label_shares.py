"""Labels that share voxels: how much of each voxel belongs to each label."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from volmap.types.codes import LabelCodes
from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.grid import Grid

Floats = NDArray[np.float64]

# Shares that differ by less differ by rounding.
_TIE = 1e-9


@dataclass(frozen=True, eq=False)
class LabelShares(Frozen):
    """For each voxel and label the part of the voxel's volume that the label fills.

    Most voxels belong to one label or to none, so only the others are listed; a volume a label is made when
    it is asked for.

    Parameters
    ----------
    grid : Grid
    labels : tuple of int
        The labels above 0 that are told apart, ascending; those that fill nothing included.
    whole : (I, J, K) uint16
        The label that fills a voxel alone; 0 elsewhere.
    voxel : (n,) int64
        Places of the other shares in the grid (flat, last index fastest), ascending.
    label : (n,) int64
        Ascending in a voxel.
    share : (n,) float64
        From 0 to 1; what is missing to 1 in a voxel lies outside all labels.
    names : mapping of int to str
    name : str
        File name (never a path) or any short name for messages.
    codes : mapping of int to LabelCodes

    Raises
    ------
    InputError
        Shares out of order, of other labels or places, or not from 0 to 1.
    """

    grid: Grid
    labels: tuple[int, ...]
    whole: NDArray[np.uint16]
    voxel: NDArray[np.int64]
    label: NDArray[np.int64]
    share: Floats
    names: Mapping[int, str] = field(default_factory=dict)
    name: str = "labels"
    codes: Mapping[int, LabelCodes] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "labels", tuple(int(v) for v in self.labels))
        whole = self._own("whole", np.uint16, self.grid.shape)
        voxel = self._own("voxel", np.int64, (None,))
        label = self._own("label", np.int64, voxel.shape)
        share = self._own("share", np.float64, voxel.shape)
        key = voxel * 65536 + label
        fits = len(key) == 0 or (voxel[0] >= 0 and voxel[-1] < whole.size and (np.diff(key) > 0).all())
        if not fits or not np.isin(label, self.labels).all() or whole.ravel()[voxel].any():
            raise InputError("shares are not listed voxel by voxel, label by label", where=self.name)
        if len(share) and not (share.min() >= 0 and share.max() <= 1 + 1e-9):
            raise InputError("shares are not from 0 to 1", where=self.name)
        names = {int(k): str(v) for k, v in dict(self.names).items()}
        object.__setattr__(self, "names", MappingProxyType(names))
        object.__setattr__(self, "codes", MappingProxyType(dict(self.codes)))

    def __reduce__(self):  # type: ignore[no-untyped-def]
        lists = self.whole, self.voxel, self.label, self.share
        return LabelShares, (self.grid, self.labels, *lists, dict(self.names), self.name, dict(self.codes))

    @property
    def present(self) -> tuple[int, ...]:
        """The labels that fill anything, ascending."""
        return tuple(v for v in np.union1d(np.unique(self.whole), np.unique(self.label)).tolist() if v)

    def name_of(self, label: int) -> str:
        """Name of a label, in words."""
        return self.names.get(label, f"label {label}")

    def of_label(self, label: int) -> NDArray[np.float32]:
        """(I, J, K) the part of each voxel that one label fills."""
        filled = (self.whole == label).astype(np.float32) if label else np.zeros(self.grid.shape, np.float32)
        mine = self.label == label
        filled.ravel()[self.voxel[mine]] = self.share[mine]
        return filled

    def volume_of(self, label: int) -> float:
        """Volume of one label, mm3: the sum of its shares times the volume of a voxel."""
        n_whole = int(np.count_nonzero(self.whole == label))
        return float((n_whole + self.share[self.label == label].sum()) * self.grid.voxel_mm3)

    def largest(self) -> NDArray[np.uint16]:
        """(I, J, K) the label with the largest share; 0 where what lies outside all labels is no less.

        Between labels of equal share (to 1e-9) the smaller number has it.
        """
        labels = np.array(self.whole)
        if not len(self.voxel):
            return labels
        first = np.flatnonzero(np.diff(self.voxel, prepend=-1))
        most = np.maximum.reduceat(self.share, first)
        outside = 1.0 - np.add.reduceat(self.share, first)
        group = np.cumsum(np.diff(self.voxel, prepend=-1) != 0) - 1
        wins = (self.share >= most[group] - _TIE) & (self.share > outside[group] + _TIE)
        voxel, at = np.unique(self.voxel[wins], return_index=True)  # the first of a voxel: the smallest
        labels.ravel()[voxel] = self.label[wins][at]
        return labels
