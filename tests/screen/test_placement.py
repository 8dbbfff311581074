"""Where landmark pairs lie, against distances known in closed form."""

import numpy as np
import pytest

from volmap.screen import screen_pairs_of_landmarks
from volmap.screen.placement import distance_to_body
from volmap.types import Grid, LabelVolume, LandmarkPairs, Level

AFFINE = np.array([[0, -2.0, 0, 10], [1.0, 0, 0, -5], [0, 0, 3.0, 2], [0, 0, 0, 1]])


def block(name="a.nii", full=False):
    labels = np.zeros((12, 10, 8), np.uint16)
    labels[3:9, 3:8, 2:6] = 1
    labels[5, 5, 3] = 2
    if full:
        labels[:] = 1
    return LabelVolume(Grid(labels.shape, AFFINE), labels, {}, name)


def world(*index):
    return AFFINE[:3, :3] @ index + AFFINE[:3, 3]


@pytest.mark.parametrize("full", [False, True])
def test_distances(full):
    # Closed form: inside 0 (deep) or at a voxel centre 0 (rind); beyond the block along one axis the gap.
    points = np.array([world(5, 5, 3), world(3, 3, 2), world(3, 3, 2 - 4.0), world(20, 5, 3)])
    expected = [0, 0, 6 if full else 12, 9 if full else 12]
    assert distance_to_body(block(full=full), points).tolist() == pytest.approx(expected)


def test_a_body_without_labels_is_infinitely_far():
    empty = LabelVolume(Grid((3, 3, 3), np.eye(4)), np.zeros((3, 3, 3), np.uint16))
    assert np.isinf(distance_to_body(empty, np.zeros((2, 3)))).all()


def test_a_guide_outside_is_refused_and_a_check_is_warned_of():
    good, bad = world(5, 5, 3), world(5, 5, 30)
    pairs = LandmarkPairs(
        ("in", "from", "to", "check"),
        np.array([good, bad, good, bad]),
        np.array([good, good, bad, good]),
        ("guide", "guide", "guide", "check"),
    )
    found = screen_pairs_of_landmarks(pairs, block(), block("b.nii"), name="guides.csv")
    assert [(f.level, f.where) for f in found] == [
        (Level.REFUSE, "guides.csv, from"),
        (Level.REFUSE, "guides.csv, to"),
        (Level.WARN, "guides.csv, check"),
    ]
    assert "outside the body of b.nii" in found[1].sentence


def test_near_the_boundary_is_left_to_the_mesh():
    near = np.array([world(5, 5, 5 + 1.9)])  # 5.7 mm beyond the last centre, the limit is 6
    pairs = LandmarkPairs(("n",), near, near, ("guide",))
    assert screen_pairs_of_landmarks(pairs, block(), block(), name="g") == ()
    far = np.array([world(5, 5, 5 + 2.1)])
    pairs = LandmarkPairs(("n",), far, far, ("guide",))
    assert len(screen_pairs_of_landmarks(pairs, block(), block(), name="g")) == 2
