"""Cutting long voxels, and what the voxels say."""

import numpy as np
import pytest
from label_shapes import affine_of, ball, centres, volume_of

from volmap.mesh.isotropic import signed_distance, stretched, subdivided, subdivision
from volmap.mesh.prepare import prepare, targets
from volmap.mesh.shapes import is_thin
from volmap.types import Grid, InputError, LabelVolume


def test_parts_follow_the_ratio_of_the_edges():
    assert subdivision(np.array([0.8, 0.8, 3.0])).tolist() == [1, 1, 4]
    assert subdivision(np.array([1.0, 1.5, 1.0])).tolist() == [1, 1, 1]
    assert subdivision(np.array([1.0, 2.0, 9.0])).tolist() == [1, 2, 4]


def test_signed_distance_of_a_plane():
    inside = np.zeros((6, 4, 4), bool)
    inside[3:] = True
    assert np.allclose(signed_distance(inside, np.array([2.0, 1, 1]))[:, 0, 0], [-6, -4, -2, 2, 4, 6])


def test_stretching_keeps_straight_lines():
    values = np.arange(5, dtype=np.float32)[:, None, None]
    assert np.allclose(
        stretched(values, 0, 2)[:, 0, 0], [0, 0.25, 0.75, 1.25, 1.75, 2.25, 2.75, 3.25, 3.75, 4]
    )


def test_a_cut_ball_is_rounder_than_its_voxels():
    # closed form: which fine centres lie in the ball
    spacing = (1.0, 1.0, 3.0)
    coarse = ball(12.0, spacing)
    fine = subdivided(np.array(coarse.labels), np.array(spacing), np.array([1, 1, 3]))
    x, y, z = centres(fine.shape)
    wanted = x * x + y * y + z * z < 144
    assert (fine.astype(bool) != wanted).sum() < 0.6 * (np.repeat(coarse.labels, 3, 2) != wanted).sum()


def test_specks_do_not_count_in_the_target():
    labels = np.zeros((16, 10, 10), np.uint16)
    labels[2:8, 2:8, 2:8], labels[12, 5, 5], labels[14, 2:4, 2:4] = 4, 4, 9
    found = targets(prepare(volume_of(labels)), 2.0)  # half an edge cubed: 4 mm3
    assert found.volume_mm3[1:].tolist() == [216.0, 4.0]
    assert found.specks_mm3[1:].tolist() == [1.0, 0.0]
    assert found.pieces[1:].tolist() == [1, 1]


def test_frame_of_the_mesher_returns_to_the_world():
    labels = np.zeros((20, 21, 12), np.uint16)
    labels[8:12, 9:13, 5:8] = 1
    affine = affine_of(labels.shape, (1.0, 1.0, 3.0))
    prepared = prepare(LabelVolume(Grid(labels.shape, affine), labels))
    fine = np.argwhere(prepared.fine > 0)
    world = prepared.to_world(fine * prepared.spacing)
    wanted = Grid(labels.shape, affine).to_world(np.argwhere(labels > 0).astype(float))
    assert np.allclose(world.mean(axis=0), wanted.mean(axis=0))
    assert np.allclose(
        np.ptp(world, axis=0) + prepared.spacing, np.ptp(wanted, axis=0) + np.array([1.0, 1.0, 3.0])
    )


@pytest.mark.parametrize(("thickness", "thin"), [(1, True), (2, True), (3, False), (6, False)])
def test_thin_is_under_three_voxels(thickness, thin):
    assert is_thin(np.ones((12, 12, thickness), bool)) is thin


def test_an_empty_volume_is_refused():
    with pytest.raises(InputError, match="no label") as caught:
        prepare(volume_of(np.zeros((4, 4, 4))))
    assert caught.value.refused
