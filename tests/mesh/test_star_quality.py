"""Tet quality against closed forms and VTK; guarded moves against their law."""

import numpy as np
import pytest
from vtkmodules.vtkCommonDataModel import vtkTetra, vtkTriangle

from volmap.kernels import stars as star_kernels
from volmap.kernels.compiled import kernel
from volmap.kernels.labelfield import LabelField, new_scratch
from volmap.kernels.lattice import bcc
from volmap.kernels.relocate import relax, search, search_directions
from volmap.kernels.snap import add_labels, disjoint, snap
from volmap.kernels.stars import new_stars
from volmap.kernels.strata import new_strata
from volmap.kernels.tets import dihedral_degrees, signed_volumes

six_volumes, least_sine, star_sine = (
    kernel(inner.py_func)
    for inner in (star_kernels.six_volumes, star_kernels.least_sine, star_kernels.star_sine)
)

SHARES = np.array([1.0, 0.7])


def vtk_dihedrals(corners):
    """Dihedral angles at the six edges from VTK's triangle normals, degrees.

    VTK's own TetMinAngle is not used: it mixes angles with their supplements (found on random tets).
    """
    normals = []
    for face in ([1, 2, 3], [0, 3, 2], [0, 1, 3], [0, 2, 1]):
        normal = [0.0, 0.0, 0.0]
        vtkTriangle.ComputeNormal(*corners[face].tolist(), normal)
        normals.append(normal)
    pairs = [(i, j) for i in range(4) for j in range(i)]
    return [180.0 - np.degrees(np.arccos(np.clip(np.dot(normals[i], normals[j]), -1, 1))) for i, j in pairs]


def random_tets(n):
    corners = np.random.default_rng(11).normal(size=(n, 4, 3))
    points, tets = corners.reshape(-1, 3), np.arange(4 * n).reshape(n, 4)
    turned = signed_volumes(points, tets) < 0
    tets[turned] = tets[turned][:, [0, 1, 3, 2]]
    return points, tets


def test_least_sine_is_that_of_the_dihedral_angles():
    points, tets = random_tets(40)
    wanted = np.sin(np.radians(dihedral_degrees(points, tets))).min(axis=1)
    assert np.allclose([least_sine(points, tets, t) for t in range(40)], wanted, atol=1e-12)


def test_dihedral_angles_and_volumes_agree_with_vtk():
    points, tets = random_tets(40)
    wanted = np.sort([vtk_dihedrals(points[t]) for t in tets], axis=1)
    assert np.allclose(np.sort(dihedral_degrees(points, tets), axis=1), wanted, atol=1e-6)
    volumes = [vtkTetra.ComputeVolume(*points[t].tolist()) for t in tets]
    assert np.allclose(signed_volumes(points, tets), volumes)


def test_regular_tet_closed_form():
    # dihedral angle arccos(1/3), volume edge^3 / (6 sqrt 2)
    points = np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]])
    tets = np.array([[0, 1, 3, 2]])
    assert np.isclose(least_sine(points, tets, 0), np.sqrt(8) / 3)
    assert np.isclose(six_volumes(points, tets, 0), 8**1.5 / np.sqrt(2))
    assert least_sine(points, tets[:, [1, 0, 2, 3]], 0) == -1.0


@pytest.fixture
def shaken():
    """A lattice of one label whose inner points were moved at random, and where it was."""
    points, tets = bcc(np.zeros(3), np.full(3, 3.0), 1.0)
    labels = np.ones(len(tets), np.int64)
    strata = new_strata(points, tets, labels)
    inner = strata.kind == 0
    rng = np.random.default_rng(5)
    moved = points.copy()
    moved[inner] += rng.uniform(-0.2, 0.2, (inner.sum(), 3))
    assert signed_volumes(moved, tets).min() > 0
    return new_stars(moved, tets, labels), strata


def empty_field():
    return LabelField(np.zeros((1, 1, 1), np.uint16), np.ones(3), np.ones(3), np.zeros(2))


def fixed_hull(strata):
    return strata._replace(kind=np.where(strata.kind == 0, 0, -1))


def test_star_sine_is_the_worst_of_the_star(shaken):
    stars, strata = shaken
    v = int(np.flatnonzero(strata.kind == 0)[0])
    around = [t for t in range(len(stars.tets)) if v in stars.tets[t]]
    wanted = min(least_sine(stars.points, stars.tets, t) for t in around)
    assert np.isclose(star_sine(stars, v, 1.0), wanted)


def test_smoothing_and_search_never_lower_the_worst_tet(shaken):
    stars, strata = shaken
    strata = fixed_hull(strata)

    def worst():
        return min(least_sine(stars.points, stars.tets, t) for t in range(len(stars.tets)))

    before = worst()
    relax(empty_field(), stars, strata, 1.0, SHARES, np.zeros(3), np.zeros(3), new_scratch())
    smoothed = worst()
    assert smoothed >= before
    steps = search(
        empty_field(), stars, strata, 0.8, 0.1, search_directions(), np.zeros((3, 3)), new_scratch()
    )
    assert steps > 0
    assert worst() > smoothed


def test_what_is_remembered_of_a_star_is_forgotten_when_a_point_moves(shaken):
    stars, strata = shaken
    strata = fixed_hull(strata)
    inner = np.flatnonzero(strata.kind == 0)
    before = [star_sine(stars, v, 1.0) for v in inner]  # now every tet is remembered
    relax(empty_field(), stars, strata, 1.0, SHARES, np.zeros(3), np.zeros(3), new_scratch())
    search(empty_field(), stars, strata, 0.8, 0.1, search_directions(), np.zeros((3, 3)), new_scratch())
    after = [star_sine(stars, v, 1.0) for v in inner]
    around = [np.flatnonzero((stars.tets == v).any(axis=1)) for v in inner]
    assert after == [min(least_sine(stars.points, stars.tets, t) for t in tets) for tets in around]
    assert after != before


def test_smoothing_leaves_the_hull(shaken):
    stars, strata = shaken
    before = stars.points.copy()
    relax(empty_field(), stars, fixed_hull(strata), 1.0, SHARES, np.zeros(3), np.zeros(3), new_scratch())
    hull = strata.kind != 0
    assert (stars.points[hull] == before[hull]).all()
    assert (stars.points[~hull] != before[~hull]).any()


def test_snap_keeps_the_floor_and_moves_once():
    points, tets = bcc(np.zeros(3), np.full(3, 2.0), 1.0)
    stars = new_stars(points, tets, np.ones(len(tets), np.int64))
    floors = 0.04 * 6 * signed_volumes(points, tets)
    v = int(np.argmin(np.linalg.norm(points - 1.5, axis=1)))
    places = points[[v, v, v]] + np.array([[2.0, 0, 0], [0.1, 0, 0], [0.2, 0, 0]])
    moved = np.zeros(len(points), np.int64)
    done = snap(stars, np.array([v, v, v]), places, floors=floors, moved=moved)
    assert done.tolist() == [False, True, False]
    assert np.allclose(stars.points[v], places[1])


def test_label_sets_of_points():
    sets = np.array([[1, 2, -1], [2, -1, -1], [3, -1, -1], [1, 2, 3]])
    assert disjoint(sets, np.array([[0, 1], [1, 2], [0, 2], [2, 3]])).tolist() == [False, True, True, False]
    add_labels(sets, np.array([0, 1, 3]), np.array([3, 2, 4]))
    assert sets.tolist() == [[1, 2, 3], [2, -1, -1], [3, -1, -1], [1, 2, 3]]
