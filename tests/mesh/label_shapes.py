"""Label volumes of known shapes, voxel centres on a grid around the origin."""

import numpy as np

from volmap.types import Grid, LabelVolume


def centres(shape, spacing=(1.0, 1.0, 1.0)):
    """World x, y, z of the voxel centres, mm; the middle of the grid is the origin."""
    axes = [(np.arange(n) - (n - 1) / 2) * s for n, s in zip(shape, spacing, strict=True)]
    return np.meshgrid(*axes, indexing="ij")


def affine_of(shape, spacing=(1.0, 1.0, 1.0)):
    affine = np.diag([*spacing, 1.0])
    affine[:3, 3] = [-(n - 1) / 2 * s for n, s in zip(shape, spacing, strict=True)]
    return affine


def volume_of(labels, spacing=(1.0, 1.0, 1.0), affine=None):
    labels = np.asarray(labels).astype(np.uint16)
    affine = affine_of(labels.shape, spacing) if affine is None else affine
    return LabelVolume(Grid(labels.shape, affine), labels, name="shape")


def ball(radius, spacing=(1.0, 1.0, 1.0)):
    shape = tuple(int(np.ceil(2 * radius / s)) + 6 for s in spacing)
    x, y, z = centres(shape, spacing)
    return volume_of(x * x + y * y + z * z < radius**2, spacing)


def two_in_one():
    """A ball of label 1 that holds a ball of label 2, touched by a slab of label 3."""
    shape = (26, 26, 30)
    x, y, z = centres(shape)
    labels = np.zeros(shape, np.uint16)
    labels[x * x + y * y + z * z < 10.0**2] = 1
    labels[(x - 1) ** 2 + y * y + z * z < 5.0**2] = 2
    labels[(np.abs(x) < 8) & (np.abs(y) < 8) & (z >= 8) & (z < 13)] = 3
    return volume_of(labels)


def faces_of(tets):
    """(4 m, 3) sorted corners of all faces."""
    return np.sort(tets[:, [[1, 2, 3], [0, 3, 2], [0, 1, 3], [0, 2, 1]]].reshape(-1, 3), axis=1)
