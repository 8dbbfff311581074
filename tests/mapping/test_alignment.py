"""Alignment: closed forms of the fits, recovery of known motions, laws of swapping and renaming."""

import numpy as np
import pytest
from hand_made_bodies import cubes, lopsided, rotation

from volmap.mapping import align
from volmap.mapping.alignment import turned_deg
from volmap.mapping.fits import fit_affine, fit_rigid
from volmap.mapping.starts import in_doubt
from volmap.types import InputError, LandmarkPairs, TetMesh

SHIFT = np.array([40.0, -25.0, 13.0])


@pytest.fixture(scope="module")
def body():
    return lopsided()


def placed(body, linear, shift=SHIFT):
    return body.moved(body.points @ np.asarray(linear).T + shift).interfaces


def cloud(n=40, seed=3):
    rng = np.random.default_rng(seed)
    return rng.normal(size=(n, 3)) * (5.0, 3.0, 1.0), rng.uniform(0.1, 2.0, n)


@pytest.mark.parametrize("offset", [0.0, 1000.0])
def test_rigid_fit_returns_the_motion_it_was_given(offset):
    points, weight = cloud()
    points = points + offset
    turn = rotation((1, -2, 0.5), 123.0)
    matrix = fit_rigid(points, points @ turn.T + SHIFT, weight)
    np.testing.assert_allclose(matrix[:3, :3], turn, atol=1e-12)
    np.testing.assert_allclose(matrix[:3, 3], SHIFT, atol=1e-9)


def test_rigid_fit_of_a_mirror_image_is_the_best_rotation():
    """Closed form (Kabsch 1976): for anchors mirrored along the axis of least spread, best is no turn."""
    points = np.array([[5.0, 0, 0], [-5, 0, 0], [0, 3, 0], [0, -3, 0], [0, 0, 1], [0, 0, -1]])
    matrix = fit_rigid(points, points * (1, 1, -1), np.ones(6))
    np.testing.assert_allclose(matrix, np.eye(4), atol=1e-14)


def test_weights_of_a_rigid_fit():
    """Closed form: without weight no say; between two shifts of one point set, their mean."""
    points, _ = cloud(12)
    both = np.concatenate([points, points])
    anchors = np.concatenate([np.add(points, (1, 0, 0)), np.add(points, (0, 4, 0))])
    matrix = fit_rigid(both, anchors, np.repeat([3.0, 1.0], 12))
    np.testing.assert_allclose(matrix[:3, 3], (0.75, 1.0, 0.0), atol=1e-12)
    matrix = fit_rigid(both, anchors, np.repeat([1.0, 0.0], 12))
    np.testing.assert_allclose(matrix[:3, 3], (1.0, 0.0, 0.0), atol=1e-12)


@pytest.mark.parametrize("scale", [1e-3, 1.0, 1e3])
def test_affine_fit_returns_the_affine_it_was_given_in_any_unit(scale):
    points, weight = cloud()
    linear = rotation((1, 2, 3), 50.0) @ np.array([[1.2, 0.3, 0], [0, 0.8, -0.2], [0.1, 0, 1.1]])
    matrix = fit_affine(scale * points, scale * (points @ linear.T + SHIFT), weight)
    np.testing.assert_allclose(matrix[:3, :3], linear, atol=1e-11)
    np.testing.assert_allclose(matrix[:3, 3], scale * SHIFT, rtol=1e-10)


def test_affine_fit_holds_its_stretches():
    points, weight = cloud()
    matrix = fit_affine(points, points * (10.0, 1.0, 0.1), weight)
    np.testing.assert_allclose(np.linalg.svd(matrix[:3, :3])[1], (3.0, 1.0, 1 / 3), rtol=1e-9)


def test_affine_fit_never_mirrors():
    points, weight = cloud()
    assert np.linalg.det(fit_affine(points, points * (1, 1, -1), weight)[:3, :3]) > 0


def test_rigid_fit_at_a_scale():
    """Closed form: points enlarged by the scale, turned and shifted."""
    points, weight = cloud()
    turn = rotation((3, 1, 0.5), 77.0)
    matrix = fit_rigid(points, 2.5 * points @ turn.T + SHIFT, weight, scale=2.5)
    np.testing.assert_allclose(matrix[:3, :3], 2.5 * turn, atol=1e-11)
    np.testing.assert_allclose(matrix[:3, 3], SHIFT, atol=1e-9)


def test_affine_fit_with_normals_minimises_what_it_says():
    """Truth: the same least squares stacked row by row and solved by NumPy's lstsq."""
    points, weight = cloud(60)
    rng = np.random.default_rng(8)
    normals = rng.normal(size=(60, 3))
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    anchors = points @ np.diag([1.1, 0.9, 1.0]) + SHIFT + rng.normal(size=(60, 3)) * 0.2
    across = 0.07
    rows, right = [], []
    for p, y, n, w in zip(points, anchors, normals, weight, strict=True):
        design = np.kron(np.eye(3), np.append(p, 1.0))
        along, other = np.outer(n, n), np.eye(3) - np.outer(n, n)
        for part, share in ((along, 1.0), (other, across)):
            rows.append(np.sqrt(w * share) * part @ design)
            right.append(np.sqrt(w * share) * part @ y)
    expected = np.linalg.lstsq(np.concatenate(rows), np.concatenate(right), rcond=None)[0].reshape(3, 4)
    matrix = fit_affine(points, anchors, weight, normals=normals, across=across)
    np.testing.assert_allclose(matrix[:3], expected, atol=1e-8)


@pytest.mark.parametrize("axis", np.eye(3).tolist())
def test_half_turns_are_recovered(body, axis):
    best, _ = align(body.interfaces, placed(body, rotation(axis, 180.0)))
    np.testing.assert_allclose(best.matrix[:3, :3], rotation(axis, 180.0), atol=1e-3)
    np.testing.assert_allclose(best.matrix[:3, 3], SHIFT, atol=2e-2)
    assert best.residual_mm < 1e-2
    assert best.rotation_deg == pytest.approx(180.0, abs=0.1)


def test_a_turn_with_stretch_far_from_the_origin_is_recovered(body):
    linear = rotation((1, 1, 0.3), 25.0) @ np.diag([1.2, 0.9, 1.1])
    best, _ = align(body.interfaces, placed(body, linear, SHIFT + 1000.0))
    moved = body.points @ linear.T + SHIFT + 1000.0
    assert np.abs(best.apply(body.points) - moved).max() < 0.05


@pytest.mark.parametrize("scale", [10 ** (1 / 3), 10 ** (-1 / 3)])
def test_ten_times_the_volume_upside_down_is_recovered(body, scale):
    best, _ = align(body.interfaces, placed(body, scale * rotation((1, 0, 1), 180.0)))
    np.testing.assert_allclose(best.matrix[:3, :3], scale * rotation((1, 0, 1), 180.0), atol=2e-3)


def test_a_body_in_place_keeps_its_place(body):
    best, _ = align(body.interfaces, body.interfaces)
    assert best.residual_mm < 1e-9
    np.testing.assert_allclose(best.matrix, np.eye(4), atol=1e-9)


def test_asking_the_other_way_gives_the_inverse(body):
    """Law; the second body is an affine copy, as between unlike ones local minima may differ."""
    target = placed(body, rotation((0, 1, 1), 160.0) @ np.diag([1.1, 1.0, 0.95]))
    there, _ = align(body.interfaces, target)
    back, _ = align(target, body.interfaces)
    assert np.abs(back.apply(there.apply(body.points)) - body.points).max() < 0.05


@pytest.mark.parametrize("names", [{1: 2, 2: 1}, {1: 7, 2: 30}])
def test_new_names_for_labels_change_nothing(body, names):
    linear = rotation((0, 0, 1), 170.0)
    renamed = TetMesh(body.points, body.tets, [names[int(v)] for v in body.labels])
    plain, _ = align(body.interfaces, placed(body, linear))
    other, _ = align(renamed.interfaces, placed(renamed, linear))
    assert other.name == plain.name
    np.testing.assert_allclose(other.matrix, plain.matrix, atol=1e-6)


def test_labels_tell_two_ends_apart():
    """A bar of square section looks the same after half turns; its two labels do not."""
    labels = np.ones((10, 3, 3), int)
    labels[7:] = 2
    bar = cubes(labels)
    linear = rotation((0, 0, 1), 180.0)
    best, _ = align(bar.interfaces, placed(bar, linear))
    ends = np.array([[0.0, 1.5, 1.5], [10.0, 1.5, 1.5]])
    np.testing.assert_allclose(best.apply(ends), ends @ linear.T + SHIFT, atol=0.05)


def test_every_start_has_a_name_and_none_mirrors(body):
    mirrored = body.points * (-1, 1, 1)
    target = TetMesh(mirrored, body.tets[:, [0, 2, 1, 3]], body.labels).interfaces
    best, tried = align(body.interfaces, target)
    names = ["world", "centres", "principal axes 1", "principal axes 2", "principal axes 3"]
    assert [a.name for a in tried] == [*names, "principal axes 4"]
    assert best in tried
    assert all(np.linalg.det(a.matrix[:3, :3]) > 0 for a in tried)
    assert best.residual_mm <= 1.05 * min(a.residual_mm for a in tried)


def test_starts_that_run_into_each_other_end_alike(body):
    """Of an asymmetric body in place, world and centres are one start; it is told under both names."""
    _, tried = align(body.interfaces, body.interfaces)
    ended = {a.name: a for a in tried}
    np.testing.assert_array_equal(ended["world"].matrix, ended["centres"].matrix)
    assert ended["principal axes 1"].residual_mm != ended["principal axes 2"].residual_mm


def test_more_labels_and_guides_give_more_starts():
    labels = np.ones((9, 4, 3), int)
    labels[6:], labels[:3, 2:] = 2, 3
    body = cubes(labels)
    corners = body.points[[0, 17, 40]]
    pairs = LandmarkPairs(("a", "b", "c"), corners, corners + SHIFT)
    _, tried = align(body.interfaces, placed(body, np.eye(3)), guides=pairs)
    assert {"label centres", "guides"} < {a.name for a in tried}
    best, tried = align(body.interfaces, placed(body, np.eye(3)), guides=pairs, start="guides")
    assert (best.name, len(tried)) == ("guides", 1)
    assert best.residual_mm < 1e-9


@pytest.mark.parametrize("flipped", [False, True])
def test_guides_decide_where_shapes_do_not(flipped):
    """A bar of square section fits either way round; two guides along it say which."""
    bar = cubes(np.ones((10, 3, 3), int))
    ends = np.array([[1.0, 1.5, 1.5], [9.0, 1.5, 1.5]])
    pairs = LandmarkPairs(("one", "two"), ends, ends[::-1] if flipped else ends)
    best, _ = align(bar.interfaces, bar.interfaces, guides=pairs)
    np.testing.assert_allclose(best.apply(ends), pairs.to_points, atol=1e-6)


@pytest.mark.parametrize("start", ["guides", "label centres", "sideways"])
def test_a_start_that_does_not_exist_is_refused(body, start):
    with pytest.raises(InputError, match=r"this start does not exist"):
        align(body.interfaces, body.interfaces, start=start)


def test_a_body_without_symmetry_leaves_no_doubt(body):
    best, tried = align(body.interfaces, placed(body, rotation((0, 0, 1), 30.0)))
    assert in_doubt(best, tried) == ()


def test_a_body_that_fits_upside_down_leaves_doubt():
    """A bar of square section, bent neither way: half turns about its axis fit as well."""
    bar = cubes(np.ones((10, 3, 3), int))
    best, tried = align(bar.interfaces, bar.interfaces)
    assert best.rotation_deg == pytest.approx(0.0, abs=1e-6)
    first, *others = in_doubt(best, tried)
    assert first is best
    assert any(turned_deg(best, other) == pytest.approx(180.0, abs=1.0) for other in others)
