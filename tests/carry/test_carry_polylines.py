"""Polylines through a map: exact between their points too, both ways, with their lengths."""

import numpy as np
import pytest

from volmap.carry import carry, move_points, with_bends
from volmap.carry.settings import CarrySettings
from volmap.kernels.walking import face_crossings
from volmap.types import InputError, MapChain, Polylines, TetMesh, VolumeMap


@pytest.fixture(scope="module")
def sheared(known) -> VolumeMap:
    return known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)


def random_lines(n: int, points_each: int, size: float, seed: int = 0) -> Polylines:
    points = np.random.default_rng(seed).uniform(-size, size, (n * points_each, 3))
    return Polylines(tuple(f"l{i}" for i in range(n)), points, np.arange(n + 1) * points_each)


def between(lines: Polylines, n: int):
    """n places between any two neighbouring points."""
    first = lines.segments
    share = (np.arange(1, n + 1) / (n + 1))[:, None, None]
    return lines.points[first] + share * (lines.points[first + 1] - lines.points[first])


@pytest.mark.parametrize("which", ["map", "chain"])
def test_the_image_is_exact_between_the_points(known, sheared, which):
    """Law: every place of a line lands on the straight segment between the images of its neighbours."""
    volume_map = sheared
    if which == "chain":
        mesh = known.box(6, -3, 3)
        later = VolumeMap(mesh, known.twist(np.array(mesh.points), 0.2), "target", "later")
        volume_map = MapChain((sheared, later))
    lines = random_lines(40, 4, 0.69)
    carried = carry(lines, volume_map)
    assert not carried.findings
    bent = with_bends(lines, sheared)
    if which == "chain":
        middle = carry(lines, sheared).thing
        bent = with_bends(middle, volume_map.maps[1])
        volume_map = volume_map.maps[1]
    assert len(carried.thing.points) == len(bent.points) > 3 * len(lines.points)
    exact = move_points(volume_map, between(bent, 5).reshape(-1, 3)).points.reshape(5, -1, 3)
    np.testing.assert_allclose(between(carried.thing, 5), exact, atol=1e-9)


def test_crossings_against_every_face(sheared):
    """Slow twin: each segment against the faces of every tet, by solving for coordinates."""
    mesh = sheared.mesh
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    ends = np.random.default_rng(5).uniform(-0.69, 0.69, (2, 30, 3))
    segment, share = face_crossings(points, tets, *ends)
    system = np.concatenate([points[tets].swapaxes(1, 2), np.ones((len(tets), 1, 4))], axis=1)
    for s in range(30):
        a, b = (np.linalg.solve(system, np.append(e[s], 1.0)[None, :, None])[..., 0] for e in ends)
        with np.errstate(divide="ignore", invalid="ignore"):
            t = a / (a - b)  # where each coordinate is zero
        tet, corner = np.nonzero((t > 0) & (t < 1))
        shares = t[tet, corner]
        here = a[tet] + shares[:, None] * (b - a)[tet]
        here[np.arange(len(tet)), corner] = 0
        on_face = shares[(here >= -1e-12).all(axis=1)]
        expected = np.sort(on_face)
        expected = expected[np.append(True, np.diff(expected) > 1e-9)]
        np.testing.assert_allclose(share[segment == s], expected, atol=1e-11)


def test_lines_along_edges_through_corners_and_in_faces(known):
    """Whole-number geometry: ties everywhere.  Law as above, and the walk ends."""
    mesh = known.box(4, 0, 4)
    bent_map = known.mapped(mesh, lambda x: x + 0.1 * np.sin(np.pi * x[:, [1, 2, 0]]) + 0.2 * x**2 / 4)
    lines = [
        [[0, 0, 0], [4, 4, 4]],  # main diagonals of cubes, edges of tets
        [[0, 2, 2], [4, 2, 2]],  # edges of cubes
        [[0, 0, 1], [4, 4, 1]],  # diagonals of faces
        [[0, 1, 2.5], [4, 1, 2.5]],  # inside faces of cubes
        [[0.5, 0.5, 0.25], [3.5, 3.5, 0.25]],  # inside a face between tets
        [[1, 1, 1], [3, 2, 2]],
        [[4, 4, 4], [0, 0, 0]],
        [[2, 2, 2], [2, 2, 2]],  # no length
    ]
    thing = Polylines(tuple("abcdefgh"), np.concatenate(lines), np.arange(9) * 2)
    carried = carry(thing, bent_map)
    assert not carried.findings
    bent = with_bends(thing, bent_map)
    exact = move_points(bent_map, between(bent, 5).reshape(-1, 3)).points.reshape(5, -1, 3)
    np.testing.assert_allclose(between(carried.thing, 5), exact, atol=1e-9)
    assert np.diff(bent.starts).tolist()[:2] == [5, 5]


def test_there_and_back_is_the_same_line(sheared):
    """Law: back through the inverse, every old point is there again and the new ones lie between them."""
    lines = random_lines(20, 3, 0.69, seed=2)
    there = carry(lines, sheared)
    back = carry(there.thing, sheared, reverse=True).thing
    assert back.names == lines.names
    np.testing.assert_allclose(back.lengths_mm, lines.lengths_mm, atol=1e-9)
    for i in range(20):
        old = lines.points[lines.starts[i] : lines.starts[i + 1]]
        new = back.points[back.starts[i] : back.starts[i + 1]]
        gap = np.linalg.norm(old[:, None] - new[None], axis=2).min(axis=1)
        assert gap.max() < 1e-9
    rows = there.facts["lines"]
    assert [row["name"] for row in rows] == list(lines.names)
    np.testing.assert_allclose([row["length_before_mm"] for row in rows], lines.lengths_mm)
    np.testing.assert_allclose([row["length_after_mm"] for row in rows], there.thing.lengths_mm)


def test_lengths_under_a_twist_converge_to_the_helix(known):
    """Closed form: a vertical line at distance r of a twist by a z has length h sqrt(1 + a^2 r^2).

    Rate: a map interpolated between points of a mesh is second-order; halving edges quarters the error.
    """
    r, h, a = 0.5, 1.2, 0.7
    line = Polylines(("l",), np.array([[r, 0, -h / 2], [r, 0, h / 2]]), np.array([0, 2]))
    errors = []
    for n in (7, 14, 28):
        volume_map = known.mapped(known.box(n, -0.7, 0.7), known.twist)
        errors.append(h * np.hypot(1, a * r) - carry(line, volume_map).thing.lengths_mm[0])
    errors = np.abs(errors)
    assert errors[1] < errors[0] / 2.5
    assert errors[2] < errors[1] / 2.5
    assert errors[2] < 1e-4
    chord = carry(line, volume_map, settings=CarrySettings(bends=False)).thing
    assert len(chord.points) == 2


def test_a_line_that_leaves_the_body_and_comes_back(known):
    """Two boxes with a gap: the line is exact in both, straight between, and that is said."""
    box = known.box(3, 0, 3)
    points = np.concatenate([box.points, box.points + np.array([5, 0, 0])])
    tets = np.concatenate([box.tets, np.array(box.tets) + len(box.points)])
    mesh = TetMesh(points, tets, np.ones(len(tets), np.int64))
    volume_map = VolumeMap(mesh, points + 0.1 * np.sin(points[:, [1, 2, 0]]))
    line = Polylines(("l",), np.array([[0.2, 1.3, 1.1], [7.7, 1.7, 1.9]]), np.array([0, 2]))
    carried = carry(line, volume_map)
    assert [f.code for f in carried.findings] == ["lines-leave-body"]
    bent = with_bends(line, volume_map)
    x = bent.points[:, 0]
    assert np.abs(x - 3).min() < 1e-9
    assert np.abs(x - 5).min() < 1e-9
    assert not ((x > 3 + 1e-9) & (x < 5 - 1e-9)).any()
    inner = between(bent, 3)[:, (x[:-1] > 5 - 1e-9) | (x[1:] < 3 + 1e-9)]
    exact = move_points(volume_map, inner.reshape(-1, 3)).points.reshape(inner.shape)
    found = between(carried.thing, 3)[:, (x[:-1] > 5 - 1e-9) | (x[1:] < 3 + 1e-9)]
    np.testing.assert_allclose(found, exact, atol=1e-9)


def test_lines_with_points_far_outside_are_left_out_and_named(sheared):
    lines = random_lines(4, 3, 0.6)
    points = np.array(lines.points)
    points[4] = 0, 0, 9
    points[7] = 0, 0, 0.71
    carried = carry(Polylines(lines.names, points, lines.starts), sheared, settings=CarrySettings(0.05))
    assert carried.thing.names == ("l0", "l2", "l3")
    codes = [f.code for f in carried.findings]
    assert codes == ["outside-carried", "outside-left-out", "lines-left-out", "lines-leave-body"]
    assert "l2 point 2 (0.01 mm)" in carried.findings[0].sentence
    assert "l1 point 2 (8.30 mm)" in carried.findings[1].sentence


def test_what_is_no_line():
    with pytest.raises(InputError, match="line b: a line has fewer than two points"):
        Polylines(("a", "b"), np.zeros((3, 3)), np.array([0, 2, 3]))
    with pytest.raises(InputError, match="same name"):
        Polylines(("a", "a"), np.zeros((4, 3)), np.array([0, 2, 4]))
    with pytest.raises(InputError, match="do not fit"):
        Polylines(("a",), np.zeros((3, 3)), np.array([0, 2]))
