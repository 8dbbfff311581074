"""The two exact gates: no alarm on maps that are one-to-one by theorem, no fault too small to be found."""

from dataclasses import replace

import numpy as np
import pytest
from box_of_two_labels import box
from exact_volumes import exact_volume
from valid_maps import random_valid_map, with_one_tet_inverted

from volmap.certify.boundary_crossings import boundary_crossings
from volmap.certify.inverted_tets import inverted_tets
from volmap.types import TetMesh, Verdict, VolumeMap


@pytest.fixture(scope="module")
def judge(sound, table):
    """Both gates of a map: how many tets, crossing pairs, buried parts, and whether it is one-to-one."""

    def call(volume_map):
        evidence = replace(sound, map=volume_map)
        signs = inverted_tets(evidence, table["inverted_tets"])
        gate = boundary_crossings(evidence, table["boundary_crossings"], inverted=signs)
        sound_map = signs.verdict is gate.verdict is Verdict.PASS
        assert gate.value["one_to_one"] == sound_map == ("is one-to-one" in gate.sentence)
        return signs.value["count"], gate.value["crossing_pairs"], gate.value["buried_parts"], sound_map

    return call


FINE = (0, 0, 0, True)


@pytest.mark.parametrize("seed", [11, *(pytest.param(s, marks=pytest.mark.slow) for s in range(12, 32))])
def test_maps_that_are_one_to_one_raise_no_alarm(judge, seed):
    """50 maps a seed, 1000 in all seeds but the first; some signs also by rational numbers."""
    rng = np.random.default_rng(seed)
    for turn in range(50):
        volume_map = random_valid_map(rng)
        assert judge(volume_map) == FINE, f"map {turn}"
        tets = volume_map.mesh.tets
        for t in rng.choice(len(tets), min(20, len(tets)), replace=False):
            assert exact_volume(volume_map.images[tets[t]]) > 0


def test_one_tet_inverted_by_a_relative_volume_of_1e_14_is_found_in_every_map(judge):
    rng = np.random.default_rng(7)
    for _ in range(6):
        volume_map = random_valid_map(rng)
        images, tet = with_one_tet_inverted(volume_map)
        ratio = exact_volume(images[volume_map.mesh.tets[tet]]) / exact_volume(
            volume_map.images[volume_map.mesh.tets[tet]]
        )
        assert -1.5e-14 < ratio < -0.5e-14
        assert judge(VolumeMap(volume_map.mesh, images))[0] == 1
        assert judge(VolumeMap(volume_map.mesh, images).reversed())[0] == 1


def together(first, second):
    """Two meshes as one of two pieces, and the points of the second."""
    n = len(first.points)
    both = TetMesh(
        np.concatenate([first.points, second.points]),
        np.concatenate([first.tets, second.tets + n]),
        np.concatenate([first.labels, second.labels]),
    )
    return both, np.arange(n, len(both.points))


@pytest.mark.parametrize(("into_mm", "meets"), [(1e-9, True), (0.0, True), (-1e-9, False)])
def test_two_pieces_that_cross_by_a_millionth_of_a_micrometre(judge, into_mm, meets):
    """The corner of a turned cube, 1e-9 mm inside a face of another piece, on it, or before it."""
    both, second = together(box((2, 2, 2), (4.0, 4, 4)), box((1, 1, 1), (2.0, 2, 2), origin=(8, 0, 0)))
    u = np.array([1.0, 1, 1]) / np.sqrt(3)
    across = np.linalg.qr(np.column_stack([u, [1, 0, 0], [0, 1, 0]]))[0]
    across = across * np.sign(across[:, 0] @ u) * [1, 1, 1]
    turn = across[:, [0, 1, 2]].T
    turn[2] *= np.sign(np.linalg.det(turn))
    images = both.points.copy()
    images[second] = (both.points[second] - [8, 0, 0]) @ turn.T  # diagonal along +x, lowest corner at 0
    images[second] += np.array([4.0 - into_mm, 1.3, 2.2]) - images[second][0]
    if into_mm == 0.0:
        images[second[0], 0] = 4.0
    count, pairs, buried, valid = judge(VolumeMap(both, images))
    assert (count, buried) == (0, 0)
    assert (pairs > 0) == meets == (not valid)


@pytest.mark.parametrize(("into_mm", "meets"), [(1e-9, True), (-1e-9, False)])
def test_one_piece_that_crosses_itself_by_a_millionth_of_a_micrometre(judge, into_mm, meets):
    """A bar bent to most of a ring; a point of one end is drawn out to the other end's face, or beyond."""
    bar = box((48, 2, 2), (60.0, 3.0, 3.0))
    angle, radius = bar.points[:, 0] / 60.0 * 2 * np.pi * 0.97, 12.0 - bar.points[:, 1]
    images = np.stack([radius * np.sin(angle), -radius * np.cos(angle), bar.points[:, 2]], axis=1)
    tip = int(np.argmin(np.linalg.norm(bar.points - [60, 1.5, 1.5], axis=1)))
    images[tip] = [into_mm, -10.7, 1.3]  # the other end lies in the plane x = 0, body at x > 0
    count, pairs, buried, valid = judge(VolumeMap(bar, images))
    assert (count, buried) == (0, 0)
    assert (pairs > 0) == meets == (not valid)


def hollow(n, size, origin=(0.0, 0.0, 0.0)):
    """A block of n^3 cubes without the middle one."""
    whole = box((n, n, n), (size,) * 3, origin=origin)
    kept = np.ones(n**3, bool)
    kept[n**3 // 2] = False
    kept = np.tile(kept, 6)
    return TetMesh(whole.points, whole.tets[kept], whole.labels[kept])


def test_a_ball_in_the_cavity_of_a_shell_is_no_fault_and_one_that_overfills_it_is(judge):
    """Three closed surfaces, none crossing: no one place of each piece tells whether they overlap."""
    ball = box((3, 3, 3), (1.0, 1, 1), origin=(20, 0, 0))
    first = int(np.argmin(np.linalg.norm(ball.points[ball.tets].mean(axis=1) - [20.5, 0.5, 0.5], axis=1)))
    order = np.r_[first, np.delete(np.arange(len(ball.tets)), first)]
    ball = TetMesh(ball.points, ball.tets[order], ball.labels)  # its first tet will lie in the cavity
    both, second = together(hollow(5, 5.0), ball)
    for size, buried in ((0.5, 0), (1.5, 2)):
        images = both.points.copy()
        images[second] = (both.points[second] - [20.5, 0.5, 0.5]) * size + 2.5
        volume_map = VolumeMap(both, images)
        assert judge(volume_map) == (0, 0, buried, buried == 0)
        assert judge(volume_map.reversed()) == (0, 0, buried, buried == 0)


def test_a_piece_in_a_piece_in_a_piece(judge):
    """Doubly covered and triply covered: each swallowed boundary is counted."""
    both, second = together(box((2, 2, 2), (8.0, 8, 8)), box((2, 2, 2), (4.0, 4, 4), origin=(10, 0, 0)))
    three, third = together(both, box((1, 1, 1), (1.0, 1, 1), origin=(20, 0, 0)))
    images = three.points.copy()
    assert judge(VolumeMap(three, images)) == FINE
    images[second] += [-8.1, 1.7, 1.9]
    images[third] += [-16.3, 3.1, 3.2]
    assert judge(VolumeMap(three, images)) == (0, 0, 2, False)


def without_cubes(cells, kept):
    """A block of unit cubes of which some are kept, points renumbered."""
    whole = box(cells, np.array(cells, float))
    used, tets = np.unique(whole.tets[np.tile(np.array(kept, bool), 6)], return_inverse=True)
    return TetMesh(whole.points[used], tets.reshape(-1, 4), np.ones(tets.size // 4, int))


def test_pieces_that_touch_in_a_shared_corner_may_and_may_not_lie_in_each_other(judge):
    """The two boundaries have only that corner in common, also after one piece was folded into the other."""
    touching = without_cubes((2, 2, 2), [1, 0, 0, 0, 0, 0, 0, 1])
    assert judge(VolumeMap(touching, touching.points)) == FINE
    images = touching.points.copy()
    second = (touching.points > 0.5).all(axis=1) & (touching.points.max(axis=1) > 1.5)
    skewed = np.array([[-0.3, -0.1, -0.15], [-0.12, -0.3, -0.1], [-0.1, -0.15, -0.3]])
    skewed[:, [0, 1]] = skewed[:, [1, 0]]  # an odd number of reversals: volumes stay positive
    assert np.linalg.det(skewed) > 0
    images[second] = 1.0 + (touching.points[second] - 1.0) @ skewed.T
    assert judge(VolumeMap(touching, images)) == (0, 0, 1, False)


def test_pieces_that_touch_in_a_shared_edge_may_and_may_not_lie_in_each_other(judge):
    touching = without_cubes((2, 2, 1), [1, 0, 0, 1])
    assert judge(VolumeMap(touching, touching.points)) == FINE
    images = touching.points.copy()
    second = (touching.points[:, :2] > 0.5).all(axis=1) & (touching.points[:, :2].max(axis=1) > 1.5)
    turn = np.array([[-0.3, -0.1], [-0.1, -0.3]])  # half a turn about the edge x = y = 1
    images[second, :2] = 1.0 + (touching.points[second, :2] - 1.0) @ turn.T
    far = second & (touching.points[:, :2].max(axis=1) > 1.5)
    images[far, 2] = 0.5 + 0.8 * (images[far, 2] - 0.5)  # off the first piece's floor and ceiling
    assert judge(VolumeMap(touching, images)) == (0, 0, 1, False)
