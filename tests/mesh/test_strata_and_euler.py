"""Kinds of points, label sets, pieces, Euler numbers: counted by hand, slow twins, scikit-image."""

import numpy as np
import pytest
from skimage.measure import euler_number

from volmap.kernels.lattice import bcc, oriented, used_only
from volmap.kernels.strata import MOST_TIES, new_strata
from volmap.kernels.topology import label_sets, match_faces
from volmap.mesh.euler import euler_of_tets, euler_of_voxels
from volmap.mesh.specks import pieces_of, point_pieces, without_specks


def part_of_lattice(keep, size=8.0):
    """Lattice tets whose centres satisfy a condition."""
    points, tets = bcc(np.zeros(3), np.full(3, size), 1.0)
    middle = points[tets].mean(axis=1) - size / 2 - 0.5
    return used_only(points, tets[keep(middle)])[:2]


def halves():
    """A ball of lattice tets, label 1 below and 2 above a tilted plane."""
    points, tets = part_of_lattice(lambda c: (c**2).sum(axis=1) < 9)
    height = points[tets].mean(axis=1) @ [0.3, 0.2, 1.0]
    return points, tets, np.where(height > np.median(height), 2, 1)


def test_label_sets_are_those_of_the_tets_around():
    points, tets, labels = halves()
    wanted = [set() for _ in points]
    for tet, label in zip(tets, labels, strict=True):
        for v in tet:
            wanted[v].add(int(label))
    kind = new_strata(points, tets, np.ones(len(tets), np.int64)).kind
    for v, row in enumerate(label_sets(tets, labels, match_faces(tets)[2], len(points), most=MOST_TIES)):
        assert len(row) == MOST_TIES
        found = [int(k) for k in row if k >= 0]
        assert found == sorted(wanted[v] | ({0} if kind[v] > 0 else set()))


def test_kinds_of_a_box_in_two_labels():
    # one inner point in each of two regular octahedra-like cells: counted by hand on a 2 x 1 x 1 box of cubes
    corners = np.array([[i, j, k] for i in range(3) for j in range(2) for k in range(2)], float)
    number = {tuple(c): n for n, c in enumerate(corners)}
    points, tets, labels = list(corners), [], []
    for cube in range(2):
        centre = len(points)
        points.append(np.array([cube + 0.5, 0.5, 0.5]))
        for axis in range(3):
            for side in range(2):
                ring = [(0, 0), (1, 0), (1, 1), (0, 1)]
                face = []
                for u, v in ring:
                    place = np.zeros(3)
                    place[axis], place[(axis + 1) % 3], place[(axis + 2) % 3] = side, u, v
                    place[0] += cube
                    face.append(number[tuple(place)])
                # the diagonal from the corner nearest the origin: the same from both cubes
                tets += [[centre, face[0], face[1], face[2]], [centre, face[0], face[2], face[3]]]
                labels += [cube + 1] * 2
    points, labels = np.array(points), np.array(labels)
    tets = oriented(points, np.array(tets))
    strata = new_strata(points, tets, labels)
    assert (strata.kind[12:] == 0).all()  # the two centres
    shared = points[:, 0] == 1.0
    assert (strata.kind[shared] == 2).all()  # four corners of the shared face, on a closed curve
    assert (strata.kind[:12][~shared[:12]] == 1).all()
    assert len(strata.triangles) == 20 + 2
    outward = strata.normals[0] @ (points[0] - points.mean(axis=0))
    assert outward > 0


@pytest.mark.parametrize(
    ("keep", "wanted"),
    [
        (lambda c: (c**2).sum(axis=1) < 9, 1),
        (lambda c: (np.hypot(c[:, 0], c[:, 1]) - 2.6) ** 2 + c[:, 2] ** 2 < 1.4, 0),
        (lambda c: ((c**2).sum(axis=1) < 14) & ((c**2).sum(axis=1) > 3), 2),
    ],
    ids=["ball", "torus", "shell"],
)
def test_euler_numbers_of_solids(keep, wanted):
    # ball 1, solid torus 0, ball with a cavity 2 (closed form)
    points, tets = part_of_lattice(keep)
    labels = np.full(len(tets), 3)
    assert euler_of_tets(tets, labels, len(points)) == {3: wanted}
    assert len(np.unique(pieces_of(tets, labels))) == 1


def test_euler_number_of_voxels_agrees_with_scikit_image():
    rng = np.random.default_rng(2)
    for share in (0.3, 0.6, 0.9):
        voxels = rng.random((9, 8, 7)) < share
        assert euler_of_voxels(voxels) == euler_number(voxels, connectivity=1)


def test_tets_joined_by_an_edge_are_two_pieces_that_hang_together():
    tets = np.array([[0, 1, 2, 3], [0, 1, 4, 5], [6, 7, 8, 9]])
    labels = np.ones(3, np.int64)
    assert len(set(pieces_of(tets, labels).tolist())) == 3
    assert len(set(point_pieces(tets, labels).tolist())) == 2
    assert euler_of_tets(tets, labels, 10) == {1: 3}


def test_specks_take_the_label_around_them():
    points, tets = part_of_lattice(lambda c: (c**2).sum(axis=1) < 9)
    labels = np.ones(len(tets), np.int64)
    middle = np.linalg.norm(points[tets].mean(axis=1) - 4.5, axis=1).argsort()
    labels[middle[:2]] = 2
    mended, n_specks = without_specks(points, tets, labels)
    assert (mended == 1).all()
    assert n_specks in (1, 2)
    whole, none = without_specks(points, tets, mended)
    assert none == 0
    assert (whole == 1).all()
