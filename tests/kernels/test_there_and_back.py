"""The round trip of two sampled fields against scipy's interpolation, an independent library."""

import numpy as np
from scipy.ndimage import map_coordinates

from volmap.kernels.trilinear import homecoming

FIRST = np.array([[-1.0, 0.1, 0, 9], [0, 1.2, 0.2, -4], [0, 0, 0.9, 3], [0, 0, 0, 1]])
SECOND = np.array([[0.8, 0, 0.1, -3], [0, -1.1, 0, 10], [0.2, 0, 1.3, 1], [0, 0, 0, 1]])


def by_scipy(first, first_affine, second, second_affine):
    index = np.stack(np.meshgrid(*(np.arange(n) for n in first.shape[:3]), indexing="ij"), axis=-1)
    x = index @ first_affine[:3, :3].T + first_affine[:3, 3]
    y = x + first
    inverse = np.linalg.inv(second_affine)
    at = np.moveaxis(y @ inverse[:3, :3].T + inverse[:3, 3], -1, 0)
    v = [
        map_coordinates(second[..., c].astype(float), at, order=1, mode="constant", cval=np.nan)
        for c in range(3)
    ]
    return np.linalg.norm(y + np.stack(v, axis=-1) - x, axis=-1)


def test_same_as_scipy_on_rough_fields_in_oblique_grids():
    rng = np.random.default_rng(2)
    first = rng.normal(size=(9, 8, 10, 3)).astype(np.float32)
    second = rng.normal(size=(11, 9, 7, 3)).astype(np.float32)
    first[2:4, 3, 3] = np.nan
    second[5, 4, 3] = np.nan
    found = homecoming(first, second, FIRST, np.linalg.inv(SECOND))
    expected = by_scipy(first, FIRST, second, SECOND)
    assert np.array_equal(np.isnan(found), np.isnan(expected))
    assert 20 < np.isfinite(found).sum() < found.size
    assert np.nanmax(np.abs(found - expected)) < 1e-5


def test_a_voxel_without_weight_need_not_be_defined():
    """A point exactly on a voxel centre needs that voxel only; the last voxel of a grid belongs to it."""
    first = np.zeros((3, 3, 3, 3), np.float32)
    second = np.full((3, 3, 3, 3), np.nan, np.float32)
    second[1, 1, 1] = second[2, 2, 2] = [0, 3, 4]
    found = homecoming(first, second, np.eye(4), np.eye(4))
    assert np.isfinite(found).sum() == 2
    assert found[1, 1, 1] == found[2, 2, 2] == 5
