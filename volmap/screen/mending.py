"""Mend a label volume openly: every voxel changed is told."""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.screen.judging import SPECK_VOXELS
from volmap.screen.regions import Region, body_box, enclosed, most_common, pieces, regions_of
from volmap.types.errors import InputError
from volmap.types.grid import Grid
from volmap.types.volumes import LabelVolume


@dataclass(frozen=True)
class Change:
    """One thing that was changed.

    Parameters
    ----------
    kind : str
        'filled cavity', 'dropped speck' or 'padded grid'.
    label, to_label : int
        What the voxels were and what they are now (0 = background).
    voxels : int
    volume_mm3 : float
    at_mm : tuple of 3 float
        Middle of the voxels, world mm, RAS+ (of the grid when it was padded).
    sentence : str
    """

    kind: str
    label: int
    to_label: int
    voxels: int
    volume_mm3: float
    at_mm: tuple[float, float, float]
    sentence: str

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self)


@dataclass(frozen=True)
class Mended:
    """A mended volume and the list of its changes.

    Parameters
    ----------
    labels : LabelVolume
        The volume given, itself, when there was nothing to change.
    changes : tuple of Change
    """

    labels: LabelVolume
    changes: tuple[Change, ...]


def mend(
    labels: LabelVolume,
    *,
    fill_cavities: bool = True,
    drop_specks: bool = True,
    pad: bool = True,
    speck_mm3: float | None = None,
    largest_cavity_mm3: float | None = None,
    margin_voxels: int = 2,
) -> Mended:
    """Fill cavities, drop specks, pad the grid; mending twice changes nothing more.

    Parameters
    ----------
    labels : LabelVolume
    fill_cavities : bool
        Background that is enclosed (26-connected), by one label or several, goes to the label that holds
        most of the faces around it; of several, to the smallest.
    drop_specks : bool
        Pieces (6-connected) below `speck_mm3` go to the value most of their faces lie against, background
        included.  The largest piece of a label always stays.
    pad : bool
        Add `margin_voxels` of background beyond each face of the grid a label touches.  Voxels keep their
        places in the world.
    speck_mm3 : float, optional
        Default: 8 voxels.
    largest_cavity_mm3 : float, optional
        Leave larger cavities alone; default: fill all.
    margin_voxels : int

    Raises
    ------
    InputError
        A volume or a margin that is not above 0.
    """
    for what, value in (("speck_mm3", speck_mm3), ("margin_voxels", margin_voxels)):
        if value is not None and not value > 0:
            raise InputError("is not above 0", where=what, found=str(value))
    voxel_mm3 = labels.grid.voxel_mm3
    limit = SPECK_VOXELS if speck_mm3 is None else speck_mm3 / voxel_mm3
    largest = np.inf if largest_cavity_mm3 is None else largest_cavity_mm3 / voxel_mm3
    voxels, changes = np.array(labels.labels), list[Change]()
    if voxels.any():
        box = body_box(voxels, margin=1)
        work = _Work(labels, voxels[box], np.array([s.start for s in box]), changes)
        if drop_specks:
            _drop_specks(work, limit)
        if fill_cavities:
            _fill_cavities(work, largest)
    grid = labels.grid
    if pad:
        voxels, grid = _pad(labels, voxels, margin_voxels, changes)
    if not changes:
        return Mended(labels, ())
    return Mended(replace(labels, grid=grid, labels=voxels), tuple(changes))


@dataclass(frozen=True)
class _Work:
    """The part of the volume around its labels, writeable, and the list of changes."""

    volume: LabelVolume
    labels: NDArray[np.uint16]
    origin: NDArray[np.int64]
    changes: list[Change]

    def give(self, region: Region, to_label: int, kind: str) -> None:
        """Give a region another value, and tell it."""
        part = self.labels[region.box]
        label = int(part[region.mask][0])
        part[region.mask] = to_label
        grid = self.volume.grid
        x, y, z = grid.to_world((region.middle + self.origin)[None])[0].tolist()
        mm3 = region.voxels * grid.voxel_mm3
        self.changes.append(
            Change(
                kind, label, to_label, region.voxels, mm3, (x, y, z),
                f"{kind}: {region.voxels} voxels ({mm3:.1f} mm3) near ({x:.1f}, {y:.1f}, {z:.1f}) mm, "
                f"from {self.volume.name_of(label)} to {self.volume.name_of(to_label)}",
            )
        )  # fmt: skip


def _drop_specks(work: _Work, limit: float) -> None:
    """Round by round: each gives every speck to what it touches that is no speck, so their number falls."""
    while specks := _specks(work.labels, limit):
        specked = np.zeros(work.labels.shape, bool)
        for region in specks:
            specked[region.box] |= region.mask
        firm = np.where(specked, -1, work.labels.astype(np.int64))
        targets = [_by_vote(region.values_around(firm)) for region in specks]
        for region, target in zip(specks, targets, strict=True):
            work.give(region, target, "dropped speck")


def _by_vote(values: NDArray[np.int64]) -> int:
    """The value of most faces; specks (-1) have no say, so that two of them cannot trade places for ever."""
    firm = values[values >= 0]
    return most_common(firm) if len(firm) else 0


def _specks(labels: NDArray[np.uint16], limit: float) -> list[Region]:
    found = []
    for label in np.flatnonzero(np.bincount(labels.ravel())).tolist():
        if label == 0:
            continue
        numbered, sizes = pieces(labels == label)
        if len(sizes) > 1:
            keep = int(np.argmax(sizes))
            small = [k + 1 for k, n in enumerate(sizes.tolist()) if n < limit and k != keep]
            found += regions_of(numbered, small)
    return found


def _fill_cavities(work: _Work, largest: float) -> None:
    for region in enclosed(work.labels == 0):
        if region.voxels <= largest:
            work.give(region, most_common(region.values_around(work.labels)), "filled cavity")


def _pad(
    labels: LabelVolume, voxels: NDArray[np.uint16], margin: int, changes: list[Change]
) -> tuple[NDArray[np.uint16], Grid]:
    grid = labels.grid
    touched = [
        tuple(margin if np.take(voxels, end, axis).any() else 0 for end in (0, -1)) for axis in range(3)
    ]
    if not any(map(any, touched)):
        return voxels, grid
    padded = np.pad(voxels, touched)
    affine = np.array(grid.affine)
    affine[:3, 3] -= grid.affine[:3, :3] @ np.array([t[0] for t in touched], np.float64)
    larger = Grid(padded.shape, affine)
    added = padded.size - voxels.size
    x, y, z = larger.to_world((np.array([padded.shape]) - 1) / 2.0)[0].tolist()
    shapes = " to ".join(" x ".join(map(str, shape)) for shape in (grid.shape, larger.shape))
    sentence = (
        f"padded grid: {shapes} voxels; what lay at the border stays cut flat there, and is wrong there if "
        "the organ goes on beyond the scan"
    )
    mm3 = added * grid.voxel_mm3
    changes.append(Change("padded grid", 0, 0, added, mm3, (x, y, z), sentence))
    return padded, larger
