"""Ten determinants on fields whose folds are known in closed form."""

import numpy as np
import pytest

from volmap.kernels.folds import cube_determinants

AFFINES = {
    "right-handed": np.diag([0.8, 1.1, 2.0, 1.0]),
    "left-handed": np.diag([-0.8, 1.1, 2.0, 1.0]),
    "oblique": np.array([[0.8, -0.3, 0.1, 5], [0.3, 0.9, 0.2, 6], [0, -0.2, 1.7, 7], [0, 0, 0, 1]]),
}


def centres(shape, affine):
    index = np.stack(np.meshgrid(*(np.arange(n) for n in shape), indexing="ij"), axis=-1)
    return index @ affine[:3, :3].T + affine[:3, 3]


@pytest.mark.parametrize("affine", AFFINES.values(), ids=AFFINES)
def test_linear_fields_have_their_determinant_everywhere(affine):
    gradient = np.array([[1.2, 0.3, 0], [-0.1, 0.7, 0.2], [0, 0.1, 1.5]])
    x = centres((4, 5, 3), affine)
    u = (x @ gradient.T - x).astype(np.float32)
    assert cube_determinants(u, affine) == pytest.approx(np.linalg.det(gradient), rel=1e-5)
    mirror = x * [-2, 0, 0]
    assert cube_determinants(mirror.astype(np.float32), affine) == pytest.approx(-1, rel=1e-5)


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_fold_that_central_differences_cannot_see(axis):
    """i + 0.75 (-1)^i: central derivative 1, forward differences 2.5 and -0.5 (recomputed)."""
    n = 8
    i = np.arange(n)
    y = i + 0.75 * (-1.0) ** i
    assert np.allclose((y[2:] - y[:-2]) / 2, 1)
    u = np.zeros((n, n, n, 3), np.float32)
    u[..., axis] = np.moveaxis(np.broadcast_to(y - i, (n, n, n)), 2, axis)
    smallest = cube_determinants(u, np.eye(4))
    along = np.moveaxis(smallest, axis, 0)
    assert along[0::2] == pytest.approx(-0.5)
    assert along[1::2] == pytest.approx(2.5)


def _one_sided_determinant(y, corner):
    """Determinant of the forward or backward differences at a corner of the cube (bits i, j, k)."""
    sides = [1 if corner & bit == 0 else -1 for bit in (4, 2, 1)]
    return np.linalg.det([s * (y[corner ^ bit] - y[corner]) for s, bit in zip(sides, (4, 2, 1), strict=True)])


def test_central_tets_see_what_corner_tets_do_not():
    """All eight corner tets positive, a central one inverted: moves found by random search, checked here."""
    rng = np.random.default_rng(0)
    index = centres((2, 2, 2), np.eye(4))
    for _ in range(200000):
        u = rng.uniform(-0.62, 0.62, (2, 2, 2, 3))
        y = (index + u).reshape(8, 3)
        corner = min(_one_sided_determinant(y, c) for c in range(8))
        if corner > 0 and min(np.linalg.det(y[[6, 3, 5]] - y[0]), np.linalg.det(y[[1, 2, 4]] - y[7])) < -0.01:
            break
    else:
        pytest.fail("no such cube found")
    assert cube_determinants(u.astype(np.float32), np.eye(4))[0, 0, 0] < 0


@pytest.mark.parametrize(("amplitude", "folds"), [(0.5, False), (0.99, False), (1.01, True), (1.5, True)])
def test_a_sine_folds_when_its_amplitude_reaches_one(amplitude, folds):
    """x + A sin x: J = 1 + A cos x, folds if and only if A >= 1 (recomputed)."""
    step = 0.02
    affine = np.diag([step, 1, 1, 1.0])
    affine[0, 3] = np.pi - 40.5 * step
    x = centres((82, 2, 2), affine)
    u = np.zeros(x.shape, np.float32)
    u[..., 0] = amplitude * np.sin(x[..., 0])
    assert (cube_determinants(u, affine) <= 0).any() == folds


def test_cubes_with_an_undefined_corner_are_left_out():
    u = np.zeros((4, 4, 4, 3), np.float32)
    u[1, 1, 1] = np.nan
    defined = np.isfinite(cube_determinants(u, np.eye(4)))
    assert defined.sum() == 27 - 8
    assert not defined[:2, :2, :2].any()
    assert cube_determinants(u[:1], np.eye(4)).shape == (0, 3, 3)
