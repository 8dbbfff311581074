"""Edges, faces and stars of tets against plain slow twins (sorting rows, sets, loops)."""

from itertools import pairwise

import numpy as np
import pytest

from volmap.kernels.lattice import bcc, edge_lengths, oriented
from volmap.kernels.tets import EDGES, FACES, signed_volumes
from volmap.kernels.topology import incidence, label_sets, match_faces, unique_edges


@pytest.fixture(scope="module", params=["lattice", "renumbered", "three tets at one face"])
def tets(request):
    if request.param == "three tets at one face":  # not a manifold, and must still be told apart
        return np.array([[7, 2, 4, 0], [2, 4, 0, 5], [4, 2, 0, 9], [11, 9, 3, 4]])
    _, tets = bcc(np.zeros(3), np.full(3, 3.0), 1.0)
    if request.param == "renumbered":
        rng = np.random.default_rng(3)
        tets = rng.permuted(rng.permutation(tets.max() + 1)[tets], axis=1)[rng.random(len(tets)) < 0.6]
    return np.ascontiguousarray(tets)


def test_edges(tets):
    pairs = np.sort(tets[:, EDGES], axis=2)
    wanted, place = np.unique(pairs.reshape(-1, 2), axis=0, return_inverse=True)
    edges, edge_of_tet = unique_edges(tets)
    assert (edges == wanted).all()
    assert (edge_of_tet == place.reshape(-1, 6)).all()


def test_faces(tets):
    corners = np.sort(tets[:, FACES], axis=2).reshape(-1, 3)
    seen: dict[tuple[int, ...], list[int]] = {}
    for face, row in enumerate(corners.tolist()):
        seen.setdefault(tuple(row), []).append(face)
    wanted = [pair for _, faces in sorted(seen.items()) for pair in pairwise(faces)]
    first, second, hull = match_faces(tets)
    assert list(zip(first.tolist(), second.tolist(), strict=True)) == wanted
    assert hull.tolist() == sorted(faces[0] for faces in seen.values() if len(faces) == 1)


def test_stars(tets):
    start, cell = incidence(tets, int(tets.max()) + 2)  # one point that no tet uses
    for v in range(len(start) - 1):
        assert cell[start[v] : start[v + 1]].tolist() == np.flatnonzero((tets == v).any(axis=1)).tolist()


def test_of_too_many_labels_the_smallest_stay(tets):
    labels = np.arange(len(tets)) % 13 + 1
    hull = match_faces(tets)[2]
    on_hull = set(np.delete(tets[hull // 4].ravel(), np.arange(len(hull)) * 4 + hull % 4).tolist())
    for v, row in enumerate(label_sets(tets, labels, hull, int(tets.max()) + 1, most=3)):
        wanted = set(labels[(tets == v).any(axis=1)].tolist()) | ({0} if v in on_hull else set())
        assert row.tolist() == (sorted(wanted) + [-1] * 3)[:3]


def test_read_only_arrays_do_too(tets):
    locked = tets.copy()
    locked.setflags(write=False)
    assert all((a == b).all() for a, b in zip(match_faces(locked), match_faces(tets), strict=True))


def test_volumes_and_lengths():
    points, tets = bcc(np.zeros(3), np.full(3, 2.0), 1.0)
    points = points + np.random.default_rng(5).normal(0.0, 0.1, points.shape)
    p = points[tets]
    wanted = np.linalg.det(p[:, 1:] - p[:, :1]) / 6  # independent: LAPACK
    assert np.allclose(signed_volumes(points, tets), wanted, rtol=1e-12, atol=1e-15)
    assert (signed_volumes(points, oriented(points, tets)) == np.abs(signed_volumes(points, tets))).all()
    edges = unique_edges(tets)[0]
    assert np.allclose(
        edge_lengths(points, edges), np.linalg.norm(np.diff(points[edges], axis=1)[:, 0], axis=1)
    )
