"""Volumes on a grid: labels and intensities."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from volmap.types.codes import LabelCodes
from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.grid import Grid


@dataclass(frozen=True, eq=False)
class LabelVolume(Frozen):
    """A segmentation: one whole number a voxel, 0 outside.

    Parameters
    ----------
    grid : Grid
    labels : (I, J, K) uint16
    names : mapping of int to str
        Name of each label; labels without one are called "label N".
    name : str
        File name (never a path) or any short name for messages.
    codes : mapping of int to LabelCodes
        What labels are in codes of a terminology, where the file said so.
    """

    grid: Grid
    labels: NDArray[np.uint16]
    names: Mapping[int, str] = field(default_factory=dict)
    name: str = "labels"
    codes: Mapping[int, LabelCodes] = field(default_factory=dict)

    def __post_init__(self) -> None:
        raw = np.asarray(self.labels)
        if raw.dtype.kind not in "ui" or (raw.size and (raw.min() < 0 or raw.max() > 65535)):
            raise InputError(
                "label values are not whole numbers from 0 to 65535", where=self.name, found=str(raw.dtype)
            )
        self._own("labels", np.uint16, self.grid.shape)
        names = {int(k): str(v) for k, v in dict(self.names).items()}
        object.__setattr__(self, "names", MappingProxyType(names))
        object.__setattr__(self, "codes", MappingProxyType(dict(self.codes)))

    def __reduce__(self):  # type: ignore[no-untyped-def]
        return LabelVolume, (self.grid, self.labels, dict(self.names), self.name, dict(self.codes))

    @cached_property
    def present(self) -> tuple[int, ...]:
        """The labels above 0 that occur, ascending."""
        seen = np.zeros(65536, bool)
        for plane in self.labels:  # nothing of the grid's size is made
            seen[plane] = True
        return tuple(int(v) for v in np.flatnonzero(seen) if v)

    def name_of(self, label: int) -> str:
        """Name of a label, in words."""
        return "outside" if label == 0 else self.names.get(label, f"label {label}")

    @cached_property
    def sha256(self) -> str:
        """Digest of the voxels and the affine, independent of how a file stores them."""
        return digest(self.labels.astype("<u2"), self.grid.affine)


@dataclass(frozen=True, eq=False)
class ImageVolume(Frozen):
    """Intensities on a grid.

    Parameters
    ----------
    grid : Grid
    values : (I, J, K) float32
    unit : str
    name : str
    """

    grid: Grid
    values: NDArray[np.float32]
    unit: str = ""
    name: str = "image"

    def __post_init__(self) -> None:
        self._own("values", np.float32, self.grid.shape)

    @cached_property
    def sha256(self) -> str:
        """Digest of the voxels and the affine."""
        return digest(self.values.astype("<f4"), self.grid.affine)


def digest(voxels: NDArray[np.generic], affine: NDArray[np.float64]) -> str:
    """SHA-256 of shape, voxels (first index fastest) and affine (as float32, which is what NIfTI-1 keeps)."""
    h = hashlib.sha256()
    h.update(np.array(voxels.shape, "<i8").tobytes())
    h.update(np.ascontiguousarray(voxels.T).data)
    h.update((affine.astype("<f4") + np.float32(0.0)).tobytes())
    return h.hexdigest()
