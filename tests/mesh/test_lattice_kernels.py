"""The lattice against Sommerville's closed form, its bisection against laws."""

import numpy as np
import pytest
from label_shapes import faces_of

from volmap.kernels.lattice import bcc, bisected, longest_first, oriented, split_edges, used_only
from volmap.kernels.tets import dihedral_degrees, signed_volumes
from volmap.kernels.topology import unique_edges


@pytest.fixture(scope="module")
def box():
    return bcc(np.zeros(3), np.full(3, 2.0), 1.0)


def require_conforming(tets):
    """Every face is held by one or two tets (a crack would leave lonely faces inside: see the callers)."""
    counts = np.unique(faces_of(tets), axis=0, return_counts=True)[1]
    assert counts.max() <= 2


def hull_area(points, tets):
    faces, counts = np.unique(faces_of(tets), axis=0, return_counts=True)
    p = points[faces[counts == 1]]
    return 0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1).sum()


def test_tets_are_those_of_sommerville(box):
    # dihedral angles 60 (four) and 90 (two) degrees, volume a^3 / 12: closed form (Sommerville 1923)
    points, tets = box
    angles = np.sort(dihedral_degrees(points, tets), axis=1)
    assert np.allclose(angles, [60, 60, 60, 60, 90, 90], atol=1e-9)
    assert np.allclose(signed_volumes(points, tets), 1 / 12)
    require_conforming(tets)


def test_lattice_near_some_points_is_that_part_of_the_lattice(box):
    points, tets = box
    near = np.random.default_rng(4).random(len(points)) < 0.2
    same_points, part = bcc(np.zeros(3), np.full(3, 2.0), 1.0, lambda places: near[: len(places)])
    assert (same_points == points).all()
    assert (part == tets[near[tets].any(axis=1)]).all()


def test_lattice_covers_its_box(box):
    points, tets = box
    corners = points[tets]
    inverse = np.linalg.inv(np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2))
    for place in np.random.default_rng(0).uniform(0.51, 2.0, (50, 3)):
        weights = np.einsum("mij,mj->mi", inverse, place - corners[:, 0])
        inside = (weights > -1e-9).all(axis=1) & (weights.sum(axis=1) < 1 + 1e-9)
        assert inside.any()


def test_bisection_keeps_volume_hull_and_conformity(box):
    points, tets = box
    marked = np.zeros(len(tets), bool)
    marked[:5] = True
    new_points, new_tets = bisected(points, tets, *unique_edges(tets), marked=marked)
    assert len(new_tets) > len(tets)
    assert signed_volumes(new_points, new_tets).min() > 0
    assert np.isclose(signed_volumes(new_points, new_tets).sum(), signed_volumes(points, tets).sum())
    require_conforming(new_tets)
    assert np.isclose(hull_area(new_points, new_tets), hull_area(points, tets))


def test_splitting_any_edges_conforms(box):
    points, tets = box
    edges, edge_of_tet = unique_edges(tets)
    chosen = np.random.default_rng(7).random(len(edges)) < 0.4
    middle = np.full(len(edges), -1)
    middle[chosen] = len(points) + np.arange(chosen.sum())
    rank = longest_first(np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1))
    new_tets, parent = split_edges(tets, edges, edge_of_tet, middle=middle, rank=rank)
    new_points = np.concatenate([points, points[edges[chosen]].mean(axis=1)])
    volumes = signed_volumes(new_points, new_tets)
    assert volumes.min() > 0
    assert np.allclose(np.bincount(parent, volumes), 1 / 12)
    require_conforming(new_tets)
    assert np.isclose(hull_area(new_points, new_tets), hull_area(points, tets))


def test_longest_first_breaks_ties_by_number():
    assert longest_first(np.array([1.0, 3.0, 1.0, 2.0])).tolist() == [2, 0, 3, 1]


def test_orientation_and_unused_points():
    points = np.array([[9.0, 9, 9], [0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    kept, tets, numbers = used_only(points, np.array([[1, 3, 2, 4]]))
    assert numbers.tolist() == [1, 2, 3, 4]
    assert signed_volumes(kept, tets)[0] < 0 < signed_volumes(kept, oriented(kept, tets))[0]


def test_repeated_bisection_keeps_the_shapes(box):
    # bisecting these tets at their longest edges gives a few shapes over and over, none under 45 degrees
    # (recomputed); without the closure over neighbours it falls to 30
    points, tets = box
    rng = np.random.default_rng(1)
    for _ in range(4):
        points, tets = bisected(points, tets, *unique_edges(tets), marked=rng.random(len(tets)) < 0.05)
    require_conforming(tets)
    assert dihedral_degrees(points, tets).min() > 44.9
