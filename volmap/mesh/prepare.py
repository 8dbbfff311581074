"""From a label volume to the field the mesher works on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.labelfield import LabelField
from volmap.mesh.isotropic import subdivided, subdivision
from volmap.mesh.shapes import LabelShape, label_shapes
from volmap.types.errors import InputError
from volmap.types.grid import Grid
from volmap.types.volumes import LabelVolume

MARGIN = 4  # voxels kept around the body
LEAST_PIECE = 0.5  # of the edge cubed: smaller pieces are not asked of the mesh


@dataclass(frozen=True, eq=False)
class Prepared:
    """A label volume, ready to be meshed, with any edge and any number of times.

    The mesher's own frame has its axes along the voxel axes, in mm; its labels are 0, 1, 2, ... in the order
    of `label_ids`.

    Attributes
    ----------
    grid : Grid
        Of the label volume.
    corner : (3,) int64
        First voxel kept.
    factors : (3,) int64
        Parts each voxel was cut into along each axis.
    label_ids : (n_labels,) int64
        Labels of the volume; the first is 0.
    labels : (I, J, K) uint16
        Kept voxels, not cut.
    fine : (I', J', K') uint16
        Kept voxels, cut to be nearly isotropic.
    """

    grid: Grid
    corner: NDArray[np.int64]
    factors: NDArray[np.int64]
    label_ids: NDArray[np.int64]
    labels: NDArray[np.uint16]
    fine: NDArray[np.uint16]

    @property
    def coarse_spacing(self) -> NDArray[np.float64]:
        """(3,) of the voxels, mm, to 1e-7: the last bits of an oblique affine must not change a mesh."""
        return np.asarray(np.round(self.grid.spacing, 7))

    @property
    def spacing(self) -> NDArray[np.float64]:
        """(3,) of the fine voxels, mm."""
        return np.asarray(self.coarse_spacing / self.factors)

    @property
    def voxel_volume(self) -> float:
        """Of an uncut voxel in the mesher's frame (which has no shear), mm3."""
        return float(np.prod(self.coarse_spacing))

    @cached_property
    def shapes(self) -> tuple[LabelShape, ...]:
        """Of the labels above 0, worked out once for all meshes of the volume."""
        return label_shapes(self.labels)

    @property
    def body_volume(self) -> float:
        """Of all labelled voxels in the mesher's frame, mm3."""
        return float(sum(int(shape.piece_voxels.sum()) for shape in self.shapes) * self.voxel_volume)

    def field(self, width_voxels: float) -> LabelField:
        """The smoothed indicators of the fine voxels."""
        offsets = np.zeros(len(self.label_ids))
        return LabelField(self.fine, self.spacing, np.full(3, float(width_voxels)), offsets)

    def to_world(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n, 3) points of the mesher's frame to world mm, RAS+."""
        index = points / self.coarse_spacing - 0.5 * (1.0 - 1.0 / self.factors) + self.corner
        return self.grid.to_world(index)


def prepare(volume: LabelVolume) -> Prepared:
    """Crop a label volume, number its labels without gaps, cut long voxels.

    Raises
    ------
    InputError
        When the volume holds no label.
    """
    corner, end = _body_box(volume)
    kept = volume.labels[tuple(slice(a, b) for a, b in zip(corner, end, strict=True))]
    label_ids = np.unique(np.r_[0, kept.ravel()]).astype(np.int64)
    labels = np.ascontiguousarray(np.searchsorted(label_ids, kept).astype(np.uint16))
    factors = subdivision(np.round(volume.grid.spacing, 7))
    fine = subdivided(labels, volume.grid.spacing, factors)
    return Prepared(volume.grid, corner, factors, label_ids, labels, fine)


def _body_box(volume: LabelVolume) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First and one past the last voxel of the body, with a margin that stays inside the volume."""
    body = volume.labels > 0
    spans = [np.flatnonzero(body.any(axis=tuple(b for b in range(3) if b != axis))) for axis in range(3)]
    if not len(spans[0]):
        raise InputError(
            "the volume holds no label",
            where=volume.name,
            found="0 in every voxel",
            remedy="choose a segmentation with at least one labelled voxel",
            refused=True,
        )
    low = np.array([max(0, s[0] - MARGIN) for s in spans], np.int64)
    high = np.array(
        [min(n, s[-1] + 1 + MARGIN) for s, n in zip(spans, volume.grid.shape, strict=True)], np.int64
    )
    return low, high


@dataclass(frozen=True, eq=False)
class Targets:
    """What the mesh of each label should have.

    Attributes
    ----------
    volume_mm3 : (n_labels,) float64
        In the mesher's frame; pieces smaller than half an edge cubed left out.
    specks_mm3 : (n_labels,) float64
        What was left out.
    pieces : (n_labels,) int64
        Face-connected pieces that count.
    """

    volume_mm3: NDArray[np.float64]
    specks_mm3: NDArray[np.float64]
    pieces: NDArray[np.int64]


def targets(prepared: Prepared, edge_mm: float) -> Targets:
    """Volumes and pieces the voxels ask for; a body must not swell to make up for specks no mesh can show."""
    n = len(prepared.label_ids)
    total, specks, pieces = np.zeros(n), np.zeros(n), np.ones(n, np.int64)
    for label, shape in enumerate(prepared.shapes, start=1):
        sizes = shape.piece_voxels * prepared.voxel_volume
        total[label] = shape.piece_voxels.sum() * prepared.voxel_volume
        small = (sizes < LEAST_PIECE * edge_mm**3) & (sizes < sizes.max())
        specks[label], pieces[label] = sizes[small].sum(), (~small).sum()
    return Targets(total - specks, specks, pieces)
