"""Images, vectors and tensors on voxel grids, through the exact inverse."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.carry.preimages import Joints, covering, preimages
from volmap.carry.rules import apply_rule
from volmap.carry.settings import ImageMode
from volmap.carry.splines import interpolator
from volmap.types import Finding, Grid, ImageVolume, MapChain, Rule, TensorVolume, VectorVolume, VolumeMap
from volmap.types.quantities import require_rule

Floats = NDArray[np.float64]


def pull_image(
    volume: ImageVolume,
    volume_map: VolumeMap | MapChain,
    onto: Grid,
    *,
    mode: ImageMode = "linear",
    rule: Rule = Rule.VALUE,
    reach_mm: float = 0.0,
) -> tuple[ImageVolume, tuple[Finding, ...]]:
    """Intensities on another grid: each voxel takes the interpolated value at its exact preimage.

    Parameters
    ----------
    volume : ImageVolume
        In the map's SOURCE.
    volume_map : VolumeMap
    onto : Grid
        In the map's TARGET.
    mode : 'linear' or 'cubic'
        See `splines.interpolator`.
    rule : Rule
        'value': numbers are kept.  'density': divided by the volume ratio J of the tet that holds the
        preimage, so that the integral over a piece of tissue is kept; over voxels, as far as sampling allows.
    reach_mm : float
        As in `preimages.preimages`.

    Returns
    -------
    ImageVolume
        NaN outside the image of the body, and where the preimage is beyond the volume or beside a hole in it.
    findings : tuple of Finding
    """
    require_rule(rule, 0, volume.name)
    way = _Way(volume.grid, volume_map, onto, mode, rule, reach_mm, volume.name)
    values, findings = _pull(volume.values[..., None], way)
    return ImageVolume(onto, values[..., 0], volume.unit, volume.name), findings


def pull_vectors(
    volume: VectorVolume,
    volume_map: VolumeMap | MapChain,
    onto: Grid,
    *,
    rule: Rule,
    mode: ImageMode = "linear",
    reach_mm: float = 0.0,
) -> tuple[VectorVolume, tuple[Finding, ...]]:
    """Vectors on another grid: components are interpolated at the exact preimage, then follow a rule.

    Parameters
    ----------
    volume : VectorVolume
        In the map's SOURCE.
    volume_map : VolumeMap
    onto : Grid
        In the map's TARGET.
    rule : Rule
        One for vectors; F is that of the tet that holds the preimage.
    mode : 'linear' or 'cubic'
    reach_mm : float
        As in `preimages.preimages`.

    Returns
    -------
    VectorVolume
        NaN as in `pull_image`.
    findings : tuple of Finding
    """
    require_rule(rule, 1, volume.name)
    way = _Way(volume.grid, volume_map, onto, mode, rule, reach_mm, volume.name)
    values, findings = _pull(volume.values, way)
    return VectorVolume(onto, values, volume.unit, volume.name), findings


def pull_tensors(
    volume: TensorVolume,
    volume_map: VolumeMap | MapChain,
    onto: Grid,
    *,
    rule: Rule,
    mode: ImageMode = "linear",
    reach_mm: float = 0.0,
) -> tuple[TensorVolume, tuple[Finding, ...]]:
    """Symmetric tensors on another grid; as `pull_vectors`."""
    require_rule(rule, 2, volume.name)
    way = _Way(volume.grid, volume_map, onto, mode, rule, reach_mm, volume.name)
    values, findings = _pull(volume.values, way)
    return TensorVolume(onto, values, volume.unit, volume.name), findings


class _Way(NamedTuple):
    """From where, through what, to where, and how."""

    of: Grid
    volume_map: VolumeMap | MapChain
    onto: Grid
    mode: ImageMode
    rule: Rule
    reach_mm: float
    name: str


def _pull(values: NDArray[np.float32], way: _Way) -> tuple[NDArray[np.float32], tuple[Finding, ...]]:
    """(I, J, K, c) components on the new grid."""
    findings = covering(way.of, way.onto, way.volume_map, way.name)
    carried = np.full((*way.onto.shape, values.shape[3]), np.nan, np.float32)
    look, joints = interpolator(values, way.mode), Joints()
    ruled = way.rule is not Rule.VALUE
    for part in preimages(way.of, way.volume_map, way.onto, gradients=ruled, reach_mm=way.reach_mm):
        found = look(part.at)
        if ruled:
            found = _ruled(way.rule, found, part.gradients, part.of_voxel)
        carried[part.slab][part.known] = found
        joints.add(part)
    carried.setflags(write=False)
    return carried, findings + joints.findings(way.name, way.reach_mm)


def _ruled(rule: Rule, found: Floats, gradients: Floats, of_voxel: NDArray[np.int64]) -> Floats:
    """Components after the rule: 1 a scalar, 3 a vector, 6 a symmetric tensor."""
    if found.shape[1] == 1:
        return apply_rule(rule, found[:, 0], gradients, of_voxel)[:, None]
    if found.shape[1] == 3:
        return apply_rule(rule, found, gradients, of_voxel)
    row, column = TensorVolume.ROWS, TensorVolume.COLUMNS
    tensors = np.empty((len(found), 3, 3))
    tensors[:, row, column] = tensors[:, column, row] = found
    return apply_rule(rule, tensors, gradients, of_voxel)[:, row, column]
