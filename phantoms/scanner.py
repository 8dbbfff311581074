"""The scanner: where a grid lies, and what it records."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from volmap.types import ImageVolume, LabelVolume, Landmarks
from volmap.types.grid import Grid

from .beads import Beads
from .phantom import Motion, Visit
from .texture import Texture

AXES = {"R": (0, 1), "L": (0, -1), "A": (1, 1), "P": (1, -1), "S": (2, 1), "I": (2, -1)}
BACKGROUND, NOISE_SD, TEXTURE_SD = 20.0, 12.0, 18.0


@dataclass(frozen=True)
class Protocol:
    """How one visit is scanned.

    Parameters
    ----------
    spacing_mm : tuple of 3 float
        Voxel edges along i, j, k.
    code : str
        The world direction each index grows towards, before the tilt ("LAS").
    tilt_deg : tuple of 3 float
        x-y-z Euler angles of the grid; not zero gives an oblique affine.
    margin_mm : float
        Air on every side of the body.
    """

    spacing_mm: tuple[float, float, float]
    code: str = "RAS"
    tilt_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    margin_mm: float = 6.0

    def cubic(self, voxel_mm: float | None) -> Protocol:
        """The same with cubic voxels of that edge; unchanged for None."""
        if voxel_mm is None:
            return self
        return Protocol((voxel_mm,) * 3, self.code, self.tilt_deg, self.margin_mm)


def grid_around(points: NDArray[np.float64], protocol: Protocol) -> Grid:
    """The smallest grid of a protocol that holds all points with the margin.

    The affine is rounded to float32, so that a NIfTI file keeps it exactly.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
    protocol : Protocol
    """
    turn = Rotation.from_euler("xyz", protocol.tilt_deg, degrees=True).as_matrix()
    axes = np.stack([AXES[letter][1] * turn[:, AXES[letter][0]] for letter in protocol.code], axis=1)
    spacing = np.array(protocol.spacing_mm)
    along = points @ axes
    low, high = along.min(axis=0) - protocol.margin_mm, along.max(axis=0) + protocol.margin_mm
    counts = np.ceil((high - low) / spacing).astype(int) + 1
    affine = np.eye(4)
    affine[:3, :3] = axes * spacing
    affine[:3, 3] = axes @ low
    return Grid((int(counts[0]), int(counts[1]), int(counts[2])), affine.astype(np.float32).astype(float))


def voxel_centres(grid: Grid) -> NDArray[np.float64]:
    """(I J K, 3) world positions, mm, of all voxel centres, last index fastest."""
    return grid.to_world(np.indices(grid.shape).reshape(3, -1).T.astype(np.float64))


@dataclass(frozen=True)
class Contrast:
    """What the labels are called and how bright they are.

    Parameters
    ----------
    names : mapping of int to str
    means : mapping of int to float
        Mean intensity, arbitrary units; air is 20.
    """

    names: Mapping[int, str]
    means: Mapping[int, float]


def scanned(
    motion: Motion,
    visit: int,
    grid: Grid,
    *,
    contrast: Contrast,
    texture: Texture,
    beads: Beads,
    random: np.random.Generator,
    name: str,
) -> Visit:
    """One visit: each voxel gets the label of the material at its centre, texture that moves along, noise.

    Parameters
    ----------
    motion, visit, grid : what, when and where
    contrast, texture : what the image shows
    beads : Beads
        Material points; they are not drawn into the image, so they stay independent of it.
    random : numpy Generator
        Source of the noise.
    name : str
        Prefix of the volumes' names.
    """
    material = motion.to_material(voxel_centres(grid), visit)
    labels = motion.labels_at(material)
    values = _intensity(labels, material, contrast, texture)
    values += NOISE_SD * random.standard_normal(len(values))
    shape = grid.shape
    return Visit(
        LabelVolume(
            grid, labels.reshape(shape).astype(np.uint16), dict(contrast.names), f"{name}_labels.nii.gz"
        ),
        ImageVolume(grid, values.reshape(shape).astype(np.float32), "arbitrary", f"{name}_image.nii.gz"),
        Landmarks(beads.names, motion.from_material(beads.material, visit)),
    )


def _intensity(
    labels: NDArray[np.int64], material: NDArray[np.float64], contrast: Contrast, texture: Texture
) -> NDArray[np.float64]:
    values = np.full(len(labels), BACKGROUND)
    inside = labels > 0
    means = np.full(max(contrast.means) + 1, BACKGROUND)
    means[list(contrast.means)] = list(contrast.means.values())
    values[inside] = means[labels[inside]] + TEXTURE_SD * texture.at(material[inside])
    return values
