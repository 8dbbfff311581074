"""Laws of mending: told in full, nothing else changed, twice is once, places stay."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from volmap.screen import mend, screen
from volmap.types import Grid, InputError, LabelVolume

OBLIQUE = np.array([[0.8, -0.36, 1.44, 7], [0.6, 0.48, -1.92, -3], [0, 0.8, 1.8, 11], [0, 0, 0, 1.0]])


def volume(labels, affine=OBLIQUE):
    return LabelVolume(Grid(labels.shape, affine), labels.astype(np.uint16), {1: "body"}, "a.nii")


def distance(shape=(24, 24, 24), centre=(11.5, 11.5, 11.5)):
    return np.linalg.norm(np.stack(np.indices(shape), -1) - centre, axis=-1)


def test_a_cavity_a_speck_and_the_list_of_both():
    labels = np.where(distance() < 9, 1, 0)
    whole = labels.copy()
    labels[11:13, 11:13, 11:13] = 0
    labels[1, 2, 3] = 1
    done = mend(volume(labels))
    assert np.array_equal(done.labels.labels, whole)
    assert [(c.kind, c.label, c.to_label, c.voxels) for c in done.changes] == [
        ("dropped speck", 1, 0, 1),
        ("filled cavity", 0, 1, 8),
    ]
    grid = done.labels.grid
    assert done.changes[0].at_mm == pytest.approx(grid.to_world(np.array([[1.0, 2, 3]]))[0])
    assert done.changes[1].at_mm == pytest.approx(grid.to_world(np.array([[11.5] * 3]))[0])
    assert done.changes[1].volume_mm3 == pytest.approx(8 * grid.voxel_mm3)
    assert "from outside to body" in done.changes[1].sentence
    assert dict(done.labels.names) == {1: "body"}


def test_a_cavity_between_two_labels_goes_to_the_one_with_more_faces():
    labels = np.zeros((10, 10, 10), int)
    labels[2:8, 2:8, 2:8] = 1
    labels[2:8, 2:8, 5:8] = 2
    labels[4, 4, 4] = 0  # five faces of label 1, one of label 2
    done = mend(volume(labels))
    assert done.labels.labels[4, 4, 4] == 1
    labels[4, 4, 5:7] = 0  # with it: 1 has 5 faces, 2 has 9
    done = mend(volume(labels))
    assert done.labels.labels[4, 4, 4:7].tolist() == [2, 2, 2]


def test_a_speck_inside_another_label_joins_it_rather_than_making_a_cavity():
    labels = np.where(distance() < 9, 1, 0)
    labels[0:6, 0:6, 0:2] = 2
    labels[11:13, 11, 11] = 2
    done = mend(volume(labels), pad=False)
    assert done.labels.labels[11:13, 11, 11].tolist() == [1, 1]
    assert [c.kind for c in done.changes] == ["dropped speck"]


def test_two_specks_side_by_side_do_not_trade_places_for_ever():
    # Each would take the other's label (a tie of six, the smallest wins) if specks had a say.
    x, y, z = np.indices((14, 13, 13)) - np.array([6, 6, 6])[:, None, None, None]
    along = np.where(x < 0, -x, np.maximum(x - 1, 0))
    sideways = np.abs(y) >= np.abs(z)
    labels = np.where(sideways, np.where(y < 0, 4, 5), np.where(z < 0, 6, 7))
    ends = along > np.maximum(np.abs(y), np.abs(z))
    labels = np.where(ends, np.where(x < 0, 3, 8), labels)
    labels[0, 0:3, 0:3] = 1
    labels[13, 0:3, 0:3] = 2
    labels[6, 6, 6], labels[7, 6, 6] = 1, 2
    done = mend(volume(labels), pad=False)
    assert [(c.label, c.to_label, c.voxels) for c in done.changes] == [(1, 3, 1), (2, 4, 1)]


def test_switches_and_limits():
    labels = np.where(distance() < 9, 1, 0)
    labels[11:14, 11:13, 11:13] = 0
    labels[1, 1, 1:4] = 1
    one = volume(labels, np.eye(4))
    assert mend(one, fill_cavities=False, drop_specks=False).labels is one
    assert mend(one, fill_cavities=False).changes[0].kind == "dropped speck"
    assert mend(one, speck_mm3=3.0, largest_cavity_mm3=11.0).changes == ()
    assert len(mend(one, speck_mm3=3.1, largest_cavity_mm3=12.0).changes) == 2
    with pytest.raises(InputError, match="above 0"):
        mend(one, speck_mm3=0.0)
    with pytest.raises(InputError, match="above 0"):
        mend(one, margin_voxels=0)


def test_padding_keeps_places_in_the_world():
    labels = np.zeros((6, 7, 8), int)
    labels[0:4, 2:5, 5:8] = 1
    before = volume(labels)
    done = mend(before)
    after = done.labels
    assert after.grid.shape == (8, 7, 10)
    assert [c.kind for c in done.changes] == ["padded grid"]
    for a, b in ((before, after),):
        here, there = (v.grid.to_world(np.argwhere(v.labels == 1).astype(float)) for v in (a, b))
        assert np.allclose(here, there, atol=1e-9)
    assert screen(after).of_label(1).border == ()
    assert "cut flat" in done.changes[0].sentence


def test_nothing_to_mend_gives_the_same_volume_back():
    one = volume(np.where(distance() < 9, 1, 0))
    done = mend(one)
    assert done.labels is one
    assert done.changes == ()
    empty = volume(np.zeros((4, 4, 4)))
    assert mend(empty).labels is empty


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), share=st.floats(0.05, 0.9), n_labels=st.integers(1, 4))
def test_laws_on_any_volume(seed, share, n_labels):
    rng = np.random.default_rng(seed)
    coarse = rng.integers(1, n_labels + 1, (4, 4, 4)) * (rng.random((4, 4, 4)) < share)
    labels = np.kron(coarse, np.ones((2, 2, 2), int))
    odd = rng.random(labels.shape) < 0.05
    labels[odd] = rng.integers(0, n_labels + 1, odd.sum())
    before = volume(labels)
    done = mend(before)
    after = done.labels
    # Law: mending twice is mending once.
    assert mend(after).changes == ()
    # Law: no label appears or vanishes; nothing left to mend is found.
    assert after.present == before.present
    found = {f.code for f in screen(after).findings}
    assert not found & {"specks", "cavities", "cavity_specks", "border"}
    # Law: voxels that differ are no more than those told (a voxel may be told twice, cavity after speck).
    kept = np.array(before.grid.to_world(np.argwhere(np.ones(labels.shape)).astype(float)))
    index = np.rint(after.grid.to_index(kept)).astype(int)
    differ = after.labels[tuple(index.T)] != before.labels.ravel()
    told = sum(c.voxels for c in done.changes if c.kind != "padded grid")
    assert differ.sum() <= told
    # Law: what is told accounts for every label's gain and loss.
    for label in before.present:
        gained = sum(c.voxels for c in done.changes if c.to_label == label and c.kind != "padded grid")
        lost = sum(c.voxels for c in done.changes if c.label == label and c.kind != "padded grid")
        count = [np.count_nonzero(v.labels == label) for v in (before, after)]
        assert count[1] - count[0] == gained - lost
