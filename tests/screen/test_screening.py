"""Screening of one volume: shapes with known answers, the open data, and every reason to refuse."""

import json
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from volmap_shared import __file__ as shared_file

from volmap.screen import screen
from volmap.types import Grid, InputError, LabelVolume, Level


def volume(labels, spacing=(1.0, 1.0, 1.0), name="scan.nii.gz", names=None):
    affine = np.diag([*spacing, 1.0])
    return LabelVolume(Grid(labels.shape, affine), labels.astype(np.uint16), names or {}, name)


def distance(shape=(30, 30, 30), centre=(14.5, 14.5, 14.5)):
    return np.linalg.norm(np.stack(np.indices(shape), -1) - centre, axis=-1)


def codes(result, level=None):
    return {f.code for f in result.findings if level is None or f.level is level}


def open_data(name):
    image = nib.load(Path(shared_file).parent / "subcortical" / f"{name}.nii.gz")
    values = np.asarray(image.dataobj).astype(np.uint16)
    return LabelVolume(Grid(values.shape, image.affine), values, {}, f"{name}.nii.gz")


@pytest.mark.parametrize(
    ("name", "counts"),
    [
        ("donor-10021", [5935, 1337, 1489]),
        ("donor-12876", [7673, 1210, 2189]),
        ("donor-15697", [5963, 1291, 2243]),
    ],
)
def test_published_volumes_and_pieces_of_the_open_data(name, counts):
    # Truth: published with the data; 1 mm voxels, stored L-I-P, each label one piece.
    result = screen(open_data(name))
    assert [e.volume_mm3 for e in result.labels] == pytest.approx(counts)
    assert [(e.pieces, e.euler, e.handles, e.cavities) for e in result.labels] == [(1, 1, 0, 0)] * 3
    assert result.orientation == "LIP"
    assert not result.refused
    assert [n[0] for n in result.of_label(1).neighbours] == [2]  # putamen touches pallidum
    assert result.of_label(3).neighbours == ()


def test_hippocampus_is_one_piece_with_handles():
    # Truth: published with the data ("one piece with handles").
    entry = screen(open_data("hippocampus-10021")).of_label(1)
    assert (entry.pieces, entry.voids) == (1, 0)
    assert entry.handles > 0
    assert entry.euler == 1 - entry.handles


def test_a_ball_in_a_shell():
    # Closed form: 4/3 pi r^3 to 1 %; the shell encloses one void, which is no cavity of background.
    d = distance()
    labels = np.where(d < 6, 2, np.where(d < 12, 1, 0))
    result = screen(volume(labels, (2.0, 1.0, 0.5), names={1: "rim"}))
    shell, ball = result.labels
    assert ball.volume_mm3 == pytest.approx(4 / 3 * np.pi * 6**3, rel=0.01)
    assert (shell.name, ball.name) == ("rim", "label 2")
    assert (shell.euler, shell.voids, shell.cavities, shell.handles) == (2, 1, 0, 0)
    assert (ball.euler, ball.voids) == (1, 0)
    assert shell.thinnest_voxels == 6 or shell.thinnest_voxels == 5
    assert shell.neighbours[0][0] == 2
    assert shell.neighbours[0][1] == ball.neighbours[0][1]


def test_contact_area_of_two_blocks():
    # Closed form: 4 x 5 voxel faces across k, each 2 mm x 1 mm.
    labels = np.zeros((10, 10, 20), int)
    labels[3:7, 3:8, 4:10] = 1
    labels[3:7, 3:8, 10:16] = 2
    result = screen(volume(labels, (2.0, 1.0, 3.0)))
    assert result.of_label(1).neighbours == ((2, 40.0),)
    sheared = np.array([[2.0, 0.5, 0, 0], [0, 1, 0, 0], [0, 0, 3, 0], [0, 0, 0, 1]])
    tilted = LabelVolume(Grid(labels.shape, sheared), labels.astype(np.uint16))
    assert screen(tilted).of_label(1).neighbours[0][1] == pytest.approx(40.0)  # base times height
    assert "shear" in codes(screen(tilted), Level.WARN)


def test_a_cavity_of_one_label_and_one_between_two():
    d = distance()
    labels = np.where(d < 12, 1, 0)
    labels[14:16, 14:16, 14:17] = 0
    result = screen(volume(labels))
    entry = result.of_label(1)
    assert (entry.cavities, entry.cavity_mm3, entry.voids, entry.euler) == (1, 12.0, 1, 2)
    assert "cavities" in codes(result, Level.NOTE)
    labels[(labels == 1) & (np.indices(d.shape)[0] > 14)] = 2
    labels[14, 14:16, 14:17] = 1
    labels[14, 14, 14] = 0  # now 7 voxels, 6 of them on the side of label 2
    both = screen(volume(labels))
    assert [(e.cavities, e.cavity_mm3, e.voids) for e in both.labels] == [(0, 0.0, 0), (1, 7.0, 0)]
    assert "cavity_specks" in codes(both, Level.WARN)
    assert not both.refused


def test_a_dent_is_no_cavity_and_a_diagonal_leak_opens_one():
    # Law: background is 26-connected when the body is 6-connected.
    labels = np.zeros((12, 12, 12), int)
    labels[3:9, 3:9, 3:9] = 1
    labels[5, 5, 5] = 0
    assert screen(volume(labels)).of_label(1).cavities == 1
    labels[4, 4, 4] = labels[3, 3, 3] = 0
    assert screen(volume(labels)).of_label(1).cavities == 0


def test_border_faces_in_words_follow_the_orientation():
    labels = np.zeros((10, 10, 10), int)
    labels[0:5, 3:8, 5:10] = 1
    ras = volume(labels)
    assert screen(ras).of_label(1).border == ("left", "superior")
    lps = LabelVolume(Grid(labels.shape, np.diag([-1.0, -1, 1, 1])), labels.astype(np.uint16))
    assert screen(lps).of_label(1).border == ("right", "superior")
    assert "border" in codes(screen(ras), Level.WARN)


def test_grid_facts():
    labels = np.zeros((12, 12, 12), int)
    labels[3:9, 3:9, 3:9] = 1
    affine = np.array([[0, 0, 3.0, 5], [-1.0, 0, 0, 6], [0, 1.0, 0, 7], [0, 0, 0, 1]])
    result = screen(LabelVolume(Grid(labels.shape, affine), labels.astype(np.uint16), {}, "a.nii"))
    assert result.orientation == "".join(nib.aff2axcodes(affine)) == "PSR"
    assert result.spacing_mm == (1.0, 1.0, 3.0)
    assert result.handedness == ("right" if np.linalg.det(affine) > 0 else "left")
    assert "uneven_voxels" in codes(result, Level.NOTE)
    json.dumps(result.as_dict(), allow_nan=False)


@pytest.mark.parametrize("flip", [(1, 1, 1), (-1, 1, 1), (-1, -1, -1)])
@pytest.mark.parametrize("order", [(0, 1, 2), (2, 0, 1)])
def test_storage_order_changes_no_answer(flip, order):
    # Law: the same body stored along other axes.
    labels = np.where(distance((20, 22, 24), (9, 10, 11)) < 7, 1, 0)
    labels[9:12, 9:12, 16:22] = 1
    labels[9, 10, 11] = 0
    base = screen(volume(labels)).of_label(1)
    turned = np.transpose(labels, order)[tuple(slice(None, None, s) for s in flip)]
    again = screen(volume(turned)).of_label(1)
    keys = ("voxels", "pieces", "euler", "voids", "cavities", "thinnest_voxels", "thin_voxels")
    assert [getattr(base, k) for k in keys] == [getattr(again, k) for k in keys]


def test_thin_wall_and_place():
    labels = np.zeros((30, 30, 30), int)
    labels[5:25, 5:25, 14:16] = 1
    result = screen(volume(labels))
    assert result.of_label(1).thinnest_voxels == 2
    assert "thin" in codes(result, Level.WARN)
    assert result.of_label(1).thinnest_at_mm[2] in (14.0, 15.0)


def noisy(share):
    labels = np.where(distance() < 12, 1, 0)
    labels[np.random.default_rng(0).random(labels.shape) < share] = 2
    return labels


def striped():
    labels = np.where(distance() < 12, 1, 0)
    labels[:, :, 15:17] = 0
    return labels


def seventy():
    return np.arange(30**3).reshape(30, 30, 30) % 70


def tiny():
    labels = np.where(distance() < 12, 1, 0)
    labels[2:4, 2:4, 2] = 2
    return labels


REFUSALS = {
    "empty": np.zeros((8, 8, 8)),
    "many_labels": seventy(),
    "noise": noisy(0.05),
    "empty_slices": striped(),
    "too_small": tiny(),
    "flat": np.ones((20, 20, 1)),
}


@pytest.mark.parametrize("code", REFUSALS)
def test_what_cannot_be_mapped_is_refused_with_a_remedy(code):
    result = screen(volume(REFUSALS[code]))
    assert codes(result, Level.REFUSE) == {code}
    assert result.findings[0].level is Level.REFUSE
    with pytest.raises(InputError) as caught:
        result.require_mappable()
    assert caught.value.refused
    assert caught.value.sentence.startswith("scan.nii.gz")
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("spacing", "level"), [(0.001, Level.REFUSE), (1000.0, Level.REFUSE), (0.03, Level.WARN)]
)
def test_odd_units(spacing, level):
    result = screen(volume(np.where(distance() < 12, 1, 0), (spacing,) * 3))
    assert {f.level for f in result.findings if f.code == "units"} == {level}


def test_two_pieces_one_above_the_other_are_not_missing_slices():
    # Two balls of one label: their facing caps are small, and nothing was left out.
    shape = (30, 30, 50)
    labels = (distance(shape, (14.5, 14.5, 12)) < 10) | (distance(shape, (14.5, 14.5, 35)) < 10)
    result = screen(volume(labels))
    assert not result.refused
    assert result.of_label(1).pieces == 2
    assert "pieces" in codes(result, Level.NOTE)


def test_specks_and_contacts_through_an_edge():
    labels = np.zeros((20, 20, 20), int)
    labels[2:10, 2:10, 2:10] = 1
    labels[10:16, 10:16, 2:10] = 1
    labels[18, 18, 18] = 1
    result = screen(volume(labels))
    assert {"specks", "pieces", "edge_contacts"} <= codes(result)
    assert result.of_label(1).piece_voxels == (512, 288, 1)


def test_an_edge_makes_small_parts_matter():
    labels = np.where(distance() < 5, 1, 0)
    assert "coarse" not in codes(screen(volume(labels)))
    assert "coarse" in codes(screen(volume(labels), edge_mm=4.0), Level.WARN)
    assert "edge_below_voxel" in codes(screen(volume(labels), edge_mm=0.5), Level.WARN)


def test_a_good_volume_has_nothing_found():
    assert screen(volume(np.where(distance() < 12, 1, 0))).findings == ()
