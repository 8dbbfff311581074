"""Label volumes through the exact inverse, in one of three ways that the user names."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.carry.fields import tets_at_centres
from volmap.carry.preimages import Joints, covering, preimages
from volmap.carry.settings import LabelMode
from volmap.kernels.nearest import likeliest_labels, nearest_labels
from volmap.kernels.partial_volumes import partial_volumes
from volmap.types import (
    Finding,
    Grid,
    InputError,
    LabelShares,
    LabelVolume,
    Level,
    MapChain,
    TetMesh,
    VolumeMap,
)

LABEL_SENTENCES: dict[str, str] = {
    "nearest": "each voxel has the label of the source voxel that its centre's exact preimage falls in",
    "one-hot": (
        "each voxel has the label whose indicator (1 where it is, 0 elsewhere), interpolated trilinearly at "
        "its centre's exact preimage, is largest; a tie goes to the nearest voxel's label, else the smallest "
        "number"
    ),
    "shares": (
        "each voxel has for each label the part of its volume that the label fills: source voxels taken as "
        "boxes, cut with the tets and sent through their exact affine maps, no sampling"
    ),
}


def pull_labels(
    volume: LabelVolume,
    volume_map: VolumeMap | MapChain,
    onto: Grid,
    *,
    mode: LabelMode = "nearest",
    reach_mm: float = 0.0,
) -> tuple[LabelVolume, tuple[Finding, ...]]:
    """Labels on another grid, one a voxel.

    Parameters
    ----------
    volume : LabelVolume
        In the map's SOURCE.
    volume_map : VolumeMap
    onto : Grid
        In the map's TARGET.
    mode : 'nearest', 'one-hot' or 'shares'
        'nearest': of the voxel that the preimage of the centre falls in.  'one-hot': the label with the
        largest trilinear indicator at that preimage (`kernels.nearest.likeliest_labels` tells the ties).
        'shares': the label that fills most of the voxel (`LabelShares.largest`).
    reach_mm : float
        As in `preimages.preimages`.

    Returns
    -------
    LabelVolume
        0 outside the image of the body, and where the preimage is beyond the volume.
    findings : tuple of Finding
    """
    if mode == "shares":
        shares, findings = label_shares(volume, volume_map, onto)
        return LabelVolume(onto, shares.largest(), volume.names, volume.name, volume.codes), findings
    findings = covering(volume.grid, onto, volume_map, volume.name)
    labels = np.zeros(onto.shape, np.uint16)
    look = likeliest_labels if mode == "one-hot" else nearest_labels
    joints = Joints()
    for part in preimages(volume.grid, volume_map, onto, reach_mm=reach_mm):
        labels[part.slab][part.known] = look(volume.labels, part.at)
        joints.add(part)
    labels.setflags(write=False)
    carried = LabelVolume(onto, labels, volume.names, volume.name, volume.codes)
    findings += joints.findings(volume.name, reach_mm)
    return carried, findings + _losses(volume, carried.present, volume_map.mesh)


def label_shares(
    volume: LabelVolume, volume_map: VolumeMap | MapChain, onto: Grid
) -> tuple[LabelShares, tuple[Finding, ...]]:
    """How much of each voxel each label fills.

    Exact up to rounding, for any label volume: source voxels are boxes, and what of them lies in the body is
    sent through the map's affine pieces and cut with the target voxels.  So the sum of a label's shares times
    the volume of a voxel is the volume of the carried label, as far as the grid holds it: in SOURCE each
    part of a label in a tet, times the tet's volume ratio.

    Returns
    -------
    LabelShares
        With all labels of `volume`.
    findings : tuple of Finding

    Raises
    ------
    InputError
        A chain of several maps: their composition is affine on no mesh at hand.
    """
    if len(volume_map.maps) > 1:
        raise InputError(
            "exact shares go through one map at a time",
            where=volume.name,
            remedy="carry the labels leg by leg, or by --labels one-hot or nearest",
        )
    findings = covering(volume.grid, onto, volume_map, volume.name)
    image_mesh = volume_map.image_mesh
    whole = np.empty(onto.shape, np.uint16)
    plane = onto.shape[1] * onto.shape[2]
    voxels, labels, shares = [], [], []
    for part in partial_volumes(
        onto.to_index(image_mesh.points),
        image_mesh.tets,
        onto.shape,
        origins=volume.grid.to_index(volume_map.mesh.points),
        labels=volume.labels,
    ):
        whole[part.slab] = part.whole
        voxels.append(part.voxel + part.slab.start * plane)
        labels.append(part.label)
        shares.append(np.minimum(part.share, 1.0))
    whole.setflags(write=False)
    lists = (np.concatenate(voxels), np.concatenate(labels), np.concatenate(shares))
    carried = LabelShares(onto, volume.present, whole, *lists, volume.names, volume.name, volume.codes)
    return carried, findings + _losses(volume, carried.present, volume_map.mesh)


def _losses(volume: LabelVolume, present: tuple[int, ...], mesh: TetMesh) -> tuple[Finding, ...]:
    """Labels that are gone, and labels of which a part lies outside the body and stayed behind."""
    before = _counts(volume.labels)
    left = _counts(volume.labels[tets_at_centres(mesh, volume.grid) < 0])
    findings = []
    for label in volume.present:
        if label not in present:
            sentence = f"{volume.name_of(label)} has no voxel on the new grid"
            findings.append(Finding(Level.WARN, "label-lost", volume.name, sentence))
        part = left[label] / before[label]
        if part > 0.05:
            sentence = (
                f"{100 * part:.0f} % of {volume.name_of(label)} lies outside the body and was not carried"
            )
            findings.append(Finding(Level.WARN, "outside-left-out", volume.name, sentence))
    return tuple(findings)


def _counts(labels: NDArray[np.uint16]) -> NDArray[np.int64]:
    """(65536,) voxels of each label."""
    return np.bincount(labels.ravel(), minlength=65536)
