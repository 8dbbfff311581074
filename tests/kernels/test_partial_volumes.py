"""Exact partial volumes, against closed forms and against Qhull."""

import numba
import numpy as np
import pytest
from scipy.optimize import linprog
from scipy.spatial import ConvexHull, HalfspaceIntersection

from volmap.kernels.partial_volumes import partial_volumes
from volmap.kernels.tets import FACES

# The six tets of a cube around its main diagonal (Kuhn 1960), all positive.
KUHN = np.array([[0, 4, 6, 7], [0, 6, 2, 7], [0, 2, 3, 7], [0, 3, 1, 7], [0, 1, 5, 7], [0, 5, 4, 7]])
CUBE = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)


def dense(points, tets, shape, origins, labels, n_labels=4):
    """(I, J, K, n_labels) shares, 0 for label 0."""
    shares = np.zeros((*shape, n_labels))
    for part in partial_volumes(points, tets, shape, origins=origins, labels=labels):
        here = shares[part.slab].reshape(-1, n_labels)
        for label in range(1, n_labels):
            here[part.whole.ravel() == label, label] = 1.0
        assert (here[part.voxel] == 0).all()
        assert (np.diff(part.voxel * n_labels + part.label) > 0).all()
        here[part.voxel, part.label] = part.share
    return shares


def test_a_corner_cut_off_three_voxels_has_known_volumes():
    """Closed form: x + y + z <= 2 holds 5/6 of the first unit cube and 1/6 of each of three neighbours."""
    points = np.array([[0, 0, 0], [2, 0, 0], [0, 2, 0], [0, 0, 2.0]]) - 0.5
    labels = np.full((3, 3, 3), 2, np.uint16)
    shares = dense(points, np.array([[0, 1, 2, 3]]), (3, 3, 3), points, labels)
    expected = np.zeros((3, 3, 3))
    expected[0, 0, 0] = 5 / 6
    expected[1, 0, 0] = expected[0, 1, 0] = expected[0, 0, 1] = 1 / 6
    np.testing.assert_allclose(shares[..., 2], expected, atol=1e-15)
    assert not shares[..., [0, 1, 3]].any()


def test_a_plane_between_labels_cuts_voxels_where_it_lies():
    """Closed form: a box moved by a fraction of a voxel along each axis."""
    shift = np.array([0.25, -0.4, 0.1])
    points = CUBE * 4 + 0.5
    labels = np.zeros((6, 6, 6), np.uint16)
    labels[1:3], labels[3:] = 1, 3
    shares = dense(points + shift, KUHN, (7, 6, 6), points, labels)

    def overlap(low, high, n):
        edge = np.arange(n) - 0.5
        return np.clip(np.minimum(edge + 1, high) - np.maximum(edge, low), 0, None)

    across = overlap(0.5 - 0.4, 4.5 - 0.4, 6)[:, None] * overlap(0.6, 4.6, 6)
    for label, low, high in ((1, 0.75, 2.75), (3, 2.75, 4.75)):
        expected = overlap(low, high, 7)[:, None, None] * across
        np.testing.assert_allclose(shares[..., label], expected, atol=1e-14)


@pytest.fixture(scope="module")
def scene():
    """Random labels in a bent body of 6 tets, on a target grid with other voxels."""
    random = np.random.default_rng(7)
    origins = CUBE * [5.3, 4.7, 6.1] + 0.8 + random.uniform(-0.3, 0.3, (8, 3))
    matrix = np.array([[0.9, 0.3, 0.1], [-0.2, 0.7, 0.3], [0.1, -0.2, 0.8]])
    points = origins @ matrix.T + [0.4, 1.3, -0.2] + random.uniform(-0.2, 0.2, (8, 3))
    labels = random.integers(0, 4, (6, 7, 6)).astype(np.uint16)  # the body sticks out of it
    return points, (6, 7, 7), origins, labels


def _planes_of_box(low, high):
    return np.concatenate([np.c_[np.eye(3), -high], np.c_[-np.eye(3), low]])


def _planes_of_tet(corners):
    planes = []
    for a, face in enumerate(FACES):
        normal = np.cross(corners[face[1]] - corners[face[0]], corners[face[2]] - corners[face[0]])
        normal *= -np.sign(normal @ (corners[a] - corners[face[0]])) / np.linalg.norm(normal)
        planes.append([*normal, -normal @ corners[face[0]]])
    return np.array(planes)


def _volume(planes):
    """Volume of a convex body: its deepest point by linear programming, then Qhull."""
    lengths = np.linalg.norm(planes[:, :3], axis=1)
    found = linprog([0, 0, 0, -1], np.c_[planes[:, :3], lengths], -planes[:, 3], bounds=[(None, None)] * 4)
    if found.status != 0 or found.x[3] < 1e-9:
        return 0.0
    return ConvexHull(HalfspaceIntersection(planes, found.x[:3]).intersections).volume


def _share_by_qhull(scene, voxel, label):
    points, _, origins, labels = scene
    total = 0.0
    voxel_planes = _planes_of_box(np.array(voxel) - 0.5, np.array(voxel) + 0.5)
    for tet in KUHN:
        ends, starts = points[tet], origins[tet]
        forward = (ends[1:] - ends[0]).T @ np.linalg.inv((starts[1:] - starts[0]).T)
        back = np.linalg.inv(forward)
        offset = starts[0] - back @ ends[0]
        for box in np.argwhere(labels == label):
            planes = _planes_of_box(box - 0.5, box + 0.5)
            moved = np.c_[planes[:, :3] @ back, planes[:, 3] + planes[:, :3] @ offset]
            reach = np.abs(back).sum(1) / 2 + 0.5
            if (np.abs(back @ voxel + offset - box) < reach).all():
                total += _volume(np.concatenate([voxel_planes, _planes_of_tet(ends), moved]))
    return total


def test_shares_agree_with_qhull(scene):
    """Independent library: every piece as an intersection of half-spaces, its volume by Qhull."""
    points, shape, origins, labels = scene
    shares = dense(points, KUHN, shape, origins, labels)
    body = np.argwhere(shares.sum(axis=-1) > 0.05)
    chosen = body[np.random.default_rng(1).choice(len(body), 6, replace=False)]
    for voxel in chosen:
        for label in (1, 2):
            expected = _share_by_qhull(scene, voxel, label)
            assert shares[(*voxel, label)] == pytest.approx(expected, abs=1e-9)


def test_nothing_is_lost_and_nothing_counts_twice(scene):
    """Law: with one label all over, the shares add up to the volume of the tets, and are 0 to 1."""
    points, _, origins, _ = scene
    labels = np.ones((12, 12, 12), np.uint16)
    shares = dense(points + 3, KUHN, (12, 12, 12), origins + 1, labels, 2)[..., 1]
    edges = (points[KUHN][:, 1:] - points[KUHN][:, :1]).swapaxes(1, 2)
    assert shares.sum() == pytest.approx(np.linalg.det(edges).sum() / 6, rel=1e-13)
    assert shares.max() <= 1 + 1e-13


def test_threads_change_nothing(scene):
    points, shape, origins, labels = scene
    found = []
    threads = numba.get_num_threads()
    try:
        for n in (1, threads):
            numba.set_num_threads(n)
            found.append(dense(points, KUHN, shape, origins, labels))
    finally:
        numba.set_num_threads(threads)
    np.testing.assert_array_equal(*found)


def test_fine_source_voxels_in_coarse_target_voxels():
    """Closed form: a cube of 16^3 source voxels shrunk into one target voxel; a checkerboard is halves."""
    points = CUBE * 16 - 0.5
    labels = (np.indices((16, 16, 16)).sum(axis=0) % 2 + 1).astype(np.uint16)
    shares = dense(CUBE * 1.0 - 0.5, KUHN, (1, 1, 1), points, labels, 3)
    np.testing.assert_allclose(shares[0, 0, 0], [0, 0.5, 0.5], atol=1e-13)
