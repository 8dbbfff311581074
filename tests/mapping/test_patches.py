"""Patches: steady and accidental contacts on blocks of cubes; areas by counting faces."""

import numpy as np
import pytest
from hand_made_bodies import cubes

from volmap.mapping.patches import areas, matching_patches, steady_contacts


def two_boxes(overlap=4, gap=False):
    """Boxes of 4 x 4 x 4 mm, labels 1 and 2, that share `overlap` of the 4 mm of a side."""
    labels = np.zeros((8 + gap, 8, 4), int)
    labels[:4, :4] = 1
    labels[4 + gap :, 4 - overlap : 8 - overlap] = 2
    return cubes(labels).interfaces


def corner_contact():
    """The same boxes, touching in a single cube's face."""
    labels = np.zeros((8, 8, 8), int)
    labels[:4, :4, :4] = 1
    labels[4:, 3:7, 3:7] = 2
    return cubes(labels).interfaces


def area_of(surface, triangles, share):
    return round(float((areas(surface.points, triangles) * share).sum()), 9)


def matched_areas(source, target, steady):
    patches = matching_patches(source, target, steady)
    return {
        p.name: (area_of(source, p.source, p.source_share), area_of(target, p.target, p.target_share))
        for p in patches
    }


def test_area_of_a_right_triangle():
    points = np.array([[0.0, 0, 0], [3, 0, 0], [0, 4, 0]])
    np.testing.assert_allclose(areas(points, np.array([[0, 1, 2]])), [6.0])


def test_a_shared_side_is_steady_and_has_a_patch_of_its_own():
    """Counted: 16 mm2 of contact, 5 x 16 mm2 free on each box."""
    boxes = two_boxes()
    steady, notes = steady_contacts(boxes, boxes, np.eye(4))
    assert steady == {(2, 1)}
    assert notes == ()
    assert matched_areas(boxes, boxes, steady) == {"1": (80, 80), "2": (80, 80), "2|1": (16, 16)}


@pytest.mark.parametrize("swapped", [False, True])
def test_a_contact_in_one_scan_only_is_accidental(swapped):
    """Counted: its 16 mm2 go to both free patches, half each: 80 + 8; apart, each box has 96 mm2 free."""
    bodies = [two_boxes(), two_boxes(gap=True)]
    if swapped:
        bodies.reverse()
    steady, notes = steady_contacts(*bodies, np.eye(4))
    assert steady == set()
    assert len(notes) == 1
    assert "labels 1 and 2" in notes[0]
    assert "one scan only" in notes[0]
    pair = (96, 88) if swapped else (88, 96)
    assert matched_areas(*bodies, steady) == {"1": pair, "2": pair}


def test_a_touching_corner_is_accidental():
    """1 of 96 mm2 is 1.0 % of a box's surface."""
    steady, notes = steady_contacts(corner_contact(), two_boxes(), np.eye(4))
    assert steady == set()
    assert "1.0 %" in notes[0]


def test_a_contact_whose_area_changes_much_is_accidental():
    """4 mm2 against 16 mm2: a factor of 4, more than 3."""
    steady, notes = steady_contacts(two_boxes(overlap=1), two_boxes(), np.eye(4))
    assert steady == set()
    assert "factor of 4.0" in notes[0]
    assert steady_contacts(two_boxes(overlap=2), two_boxes(), np.eye(4))[0] == {(2, 1)}


def test_overall_scale_is_no_change_of_a_contact():
    boxes = two_boxes()
    large = cubes(np.repeat([[[1] * 4] * 4, [[2] * 4] * 4], 4, axis=0), 3.0).interfaces
    scaled = np.diag([3.0, 3.0, 3.0, 1.0])
    assert steady_contacts(boxes, large, scaled)[0] == {(2, 1)}
    assert "factor of 9.0" in steady_contacts(boxes, large, np.eye(4))[1][0]


def test_contacts_in_different_places_are_accidental():
    """Contact of 8 mm2 discs (radius 1.6 mm each) at opposite ends of a long box, 18 mm apart."""
    bodies = []
    for start in (0, 18):
        labels = np.zeros((20, 8, 4), int)
        labels[:, :4] = 1
        labels[start : start + 2, 4:] = 2
        bodies.append(cubes(labels).interfaces)
    steady, notes = steady_contacts(*bodies, np.eye(4))
    assert steady == set()
    assert "18.0 mm apart" in notes[0]


@pytest.mark.parametrize("steady", [set(), {(2, 1)}, {(3, 1), (3, 2)}, {(2, 1), (3, 1), (3, 2)}])
def test_every_face_is_matched_with_weight_one_in_all(steady):
    """Law: whatever is steady, the weighted areas of all patches add up to the whole surface."""
    labels = np.ones((6, 5, 4), int)
    labels[3:], labels[:, 3:] = 2, 3
    surface = cubes(labels).interfaces
    total = sum(a for a, _ in matched_areas(surface, surface, steady).values())
    assert total == pytest.approx(areas(surface.points, surface.triangles).sum(), rel=1e-12)


def test_normals_of_matching_patches_point_the_same_way():
    """Steady contacts: from the larger label to the smaller; free patches: out of the label."""
    boxes = two_boxes()
    for patch in matching_patches(boxes, boxes, {(2, 1)}):
        p = boxes.points[patch.source]
        normals = np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0])
        if patch.name == "2|1":
            assert (normals[:, 0] < 0).all()  # label 2 is at larger x
        else:
            centre = (2.0, 2, 2) if patch.name == "1" else (6.0, 2, 2)
            assert (np.einsum("ij,ij->i", normals, p.mean(axis=1) - centre) > 0).all()
