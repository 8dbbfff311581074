"""Counting on voxels against an independent library, closed forms and slow twins."""

import numpy as np
import pytest
from scipy import ndimage
from skimage.measure import euler_number as skimage_euler

from volmap.kernels import voxels
from volmap.screen.regions import enclosed, pieces
from volmap.screen.thickness import LOOKED_FOR, thinnest


def distance(shape=(40, 40, 40), centre=(19.5, 19.5, 19.5)):
    return np.linalg.norm(np.stack(np.indices(shape), -1) - centre, axis=-1)


def torus(R=12.0, r=4.0):
    x, y, z = np.indices((40, 40, 40)) - 19.5
    return (np.hypot(x, y) - R) ** 2 + z**2 < r**2


@pytest.mark.parametrize("share", [0.05, 0.3, 0.5, 0.8])
def test_euler_number_against_scikit_image(share):
    # Independent library: scikit-image, connectivity 1 (6-connected), on noise, where every case occurs.
    mask = np.random.default_rng(4).random((14, 13, 12)) < share
    assert voxels.euler_number(mask) == skimage_euler(mask, connectivity=1)


@pytest.mark.parametrize(
    ("mask", "expected"),
    [
        (distance() < 12, 1),
        ((distance() < 12) & (distance() > 6), 2),
        (torus(), 0),
        (np.ones((1, 1, 1), bool), 1),
        (np.zeros((3, 3, 3), bool), 0),
    ],
    ids=["ball", "shell", "torus", "voxel", "nothing"],
)
def test_euler_number_of_known_shapes(mask, expected):
    # Closed form: ball 1, shell 2 (one void), torus 0 (one handle).
    assert voxels.euler_number(mask) == expected


def test_pieces_voids_and_handles_add_up_to_the_euler_number():
    # Law (Euler-Poincare): chi = b0 - b1 + b2; one ball, one shell and two tori apart.
    ball = np.pad(distance((12, 12, 12), (5.5, 5.5, 5.5)) < 5, 2)
    hollow = np.pad((distance((12, 12, 12), (5.5, 5.5, 5.5)) < 5) & (distance((12,) * 3, (5.5,) * 3) > 2), 2)
    both = np.concatenate([ball, hollow])
    assert len(pieces(both)[1]) == 2
    assert len(enclosed(~both)) == 1
    assert voxels.euler_number(both) == 2 + 1
    tori = np.concatenate([torus(), torus()])
    assert (len(pieces(tori)[1]), len(enclosed(~tori)), voxels.euler_number(tori)) == (2, 0, 0)


def test_face_contacts_against_a_slow_twin():
    labels = np.random.default_rng(2).integers(0, 4, (5, 4, 6)).astype(np.uint16)
    slow = {}
    for index in np.ndindex(labels.shape):
        for axis in range(3):
            other = list(index)
            other[axis] += 1
            if other[axis] < labels.shape[axis]:
                a, b = sorted((int(labels[index]), int(labels[tuple(other)])))
                if a != b:
                    slow.setdefault((a, b), [0, 0, 0])[axis] += 1
    assert {k: v.tolist() for k, v in voxels.face_contacts(labels).items()} == slow


def test_lonely_voxels_against_a_slow_twin():
    labels = np.random.default_rng(9).integers(0, 3, (6, 5, 4)).astype(np.uint16)
    padded = np.pad(labels, 1)
    slow = np.zeros(labels.shape, bool)
    for i, j, k in np.ndindex(labels.shape):
        near = [padded[i + 1 + a, j + 1 + b, k + 1 + c] for a, b, c in
                [(1, 0, 0), (-1, 0, 0), (0, 1, 0), (0, -1, 0), (0, 0, 1), (0, 0, -1)]]  # fmt: skip
        slow[i, j, k] = labels[i, j, k] > 0 and sum(v != labels[i, j, k] for v in near) >= 5
    assert np.array_equal(voxels.lonely_voxels(np.pad(labels, 1)), np.pad(slow, 1))


@pytest.mark.parametrize("side", [1, 2, 3, 5])
def test_cubes_that_fit_against_morphological_opening(side):
    # Independent library: scipy's binary opening with a cube.
    mask = np.random.default_rng(side).random((15, 14, 13)) < 0.97
    room = np.pad(mask, side)
    opened = voxels.spread(voxels.fits_cubes(room, side), side)
    expected = ndimage.binary_opening(room, np.ones((side,) * 3))
    assert expected.any()
    assert np.array_equal(opened, expected)


@pytest.mark.parametrize("thickness", [1, 2, 3, 5, 7])
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_wall_says_its_thickness(thickness, axis):
    # Closed form: a plate of t voxels is t voxels thick.
    shape = [24, 24, 24]
    shape[axis] = thickness
    assert thinnest(np.ones(shape, bool))[0] == thickness


@pytest.mark.parametrize("thickness", [1, 2, 4])
def test_a_fin_on_a_block_says_its_own_thickness_and_where(thickness):
    # Closed form: only the fin is thin; the block's edges and corners do not count.
    mask = np.zeros((20, 20, 40), bool)
    mask[2:18, 2:18, 2:18] = True
    mask[8 : 8 + thickness, 2:18, 18:38] = True
    found, n_thin, place = thinnest(mask)
    assert found == thickness
    assert place[2] >= 18
    assert 0 < n_thin <= thickness * 16 * 20


def test_a_ball_is_not_called_thin_for_its_roundness():
    assert thinnest(distance() < 12) == (LOOKED_FOR, 0, None)


def test_a_bridge_of_two_voxels_between_balls():
    mask = (distance((40, 40, 60), (19.5, 19.5, 13)) < 10) | (distance((40, 40, 60), (19.5, 19.5, 46)) < 10)
    mask[19:21, 19:21, 13:46] = True
    found, _, place = thinnest(mask)
    assert found == 2
    assert 22 <= place[2] <= 37


def test_a_thin_spherical_shell_is_as_thin_as_it_is():
    # Closed form: shell of 2.0 voxels; a voxel shell is never thicker than that plus one.
    assert thinnest((distance() < 14) & (distance() >= 12))[0] in (1, 2)
