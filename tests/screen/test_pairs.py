"""Screening of pairs."""

import json
from dataclasses import replace

import numpy as np
import pytest

from volmap.screen import screen_pair
from volmap.types import Grid, InputError, LabelVolume, Level


def ball(radius, hollow=0.0, name="a.nii", label=1, spacing=1.0):
    d = np.linalg.norm(np.stack(np.indices((30, 30, 30)), -1) - 14.5, axis=-1)
    labels = np.where((d < radius) & (d >= hollow), label, 0).astype(np.uint16)
    return LabelVolume(Grid(labels.shape, np.diag([spacing] * 3 + [1.0])), labels, {}, name)


def codes(pair, level):
    return {f.code for f in pair.comparison if f.level is level}


def test_volume_ratio_is_target_over_source():
    # Closed form: twice the voxel edge is 8 times the volume.
    pair = screen_pair(ball(10), ball(10, spacing=2.0, name="b.nii"))
    assert pair.volume_ratios[0] == (1, pytest.approx(8.0))
    assert codes(pair, Level.WARN) == {"volume_ratio"}
    back = screen_pair(ball(10, spacing=2.0), ball(10, name="b.nii"))
    assert back.volume_ratios[0] == (1, pytest.approx(1 / 8))
    assert codes(back, Level.WARN) == {"volume_ratio"}
    assert not pair.refused


def test_the_same_volume_twice_is_told():
    # Law: equal digests of voxels and affine are one scan, whatever the files are called.
    assert codes(screen_pair(ball(10), ball(10, name="b.nii")), Level.WARN) == {"same_volume"}
    assert screen_pair(ball(10), ball(10, spacing=1.01, name="b.nii")).comparison == ()


def test_two_names_for_one_number_are_told():
    # Law: labels are matched by number, so only names that both tables give can disagree.
    def named(name, names):
        return replace(ball(10 if name == "a.nii" else 11, name=name), names=names)

    liver, spleen = named("a.nii", {1: "liver"}), named("b.nii", {1: "spleen"})
    assert codes(screen_pair(liver, spleen), Level.WARN) == {"names_differ"}
    assert screen_pair(liver, named("b.nii", {1: "liver"})).comparison == ()
    assert screen_pair(liver, named("b.nii", {})).comparison == ()


def test_limits_of_the_volume_ratio():
    assert screen_pair(ball(10), ball(10, spacing=1.44, name="b")).comparison == ()
    assert codes(screen_pair(ball(10), ball(10, spacing=1.45, name="b")), Level.WARN) == {"volume_ratio"}
    assert codes(screen_pair(ball(10), ball(10, spacing=2.8, name="b")), Level.REFUSE) == {"volume_ratio"}


def test_a_label_that_one_lacks():
    pair = screen_pair(ball(10), ball(10, label=2, name="b.nii"))
    assert [f.where for f in pair.comparison] == ["a.nii", "b.nii"]
    assert codes(pair, Level.REFUSE) == {"missing_label"}
    with pytest.raises(InputError, match="lacks label 2") as caught:
        pair.require_mappable()
    assert caught.value.refused


def test_a_void_on_one_side_only_is_refused_unless_allowed():
    pair = screen_pair(ball(12), ball(12, hollow=5, name="b.nii"))
    assert codes(pair, Level.REFUSE) == {"topology"}
    assert "Euler numbers 1 and 2" in pair.comparison[0].sentence
    assert "0 enclosed voids against 1" in pair.comparison[0].sentence
    allowed = screen_pair(ball(12), ball(12, hollow=5, name="b.nii"), allow_topology_change=True)
    assert codes(allowed, Level.WARN) == {"topology"}
    assert not allowed.refused


def test_the_same_pair_both_ways_and_json():
    # Law: A against B and B against A agree but for the inverse ratio.
    a, b = ball(12, hollow=5), ball(13, hollow=4, name="b.nii")
    there, back = screen_pair(a, b), screen_pair(b, a)
    assert there.comparison == back.comparison == ()
    assert there.volume_ratios[0][1] * back.volume_ratios[0][1] == pytest.approx(1)
    json.dumps(there.as_dict(), allow_nan=False)


def test_an_empty_target_is_refused_for_being_empty():
    pair = screen_pair(ball(12), ball(0, name="b.nii"))
    assert pair.refused
    assert pair.findings[0].code == "empty"
