"""Matching: closed forms on shifted spheres, what is left out, derivatives, order of the bodies."""

import numpy as np
import pytest
from hand_made_bodies import ball, cubes, lopsided, matcher, rotation

from volmap.kernels import blocksystem, observations
from volmap.mapping.matching import Matcher, at_points, edge_numbers, unit
from volmap.mapping.patches import Patch


def test_a_body_matches_itself():
    body = lopsided()
    pulls, residual = matcher(body, body.interfaces).match(np.array(body.points))
    assert residual.rms_mm < 1e-12
    assert residual.max_mm < 1e-12
    assert observations.misfit(pulls, np.array(body.points)) < 1e-24


@pytest.mark.parametrize("shift", [0.1, 0.4])
def test_a_shifted_sphere(shift):
    """Closed form, recomputed: a unit sphere shifted by d is d/2 away in the mean, d/sqrt(3) rms, d at most.

    At d = 0.4 as at 0.1, since the area-weighted integrals of |w| and w^2 hold for every d <= 1.
    """
    body = ball(4)
    there = np.add(body.points, (0.0, 0.0, shift))
    _, residual = matcher(body, body.interfaces).match(there)
    assert residual.mean_mm == pytest.approx(shift / 2, rel=0.01)
    assert residual.rms_mm == pytest.approx(shift / np.sqrt(3), rel=0.01)
    assert residual.max_mm == pytest.approx(shift, rel=0.01)
    assert residual.rejected == 0.0


def test_strengths_are_shares_of_both_areas():
    """Law: each direction has weight one half, and within it each point by its area."""
    body = ball(2)
    pulls, _ = matcher(body, body.interfaces).match(np.array(body.points))
    half = len(pulls.strengths) // 2
    assert pulls.strengths[:half].sum() == pytest.approx(0.5, rel=1e-12)
    assert pulls.strengths[half:].sum() == pytest.approx(0.5, rel=1e-12)
    area = at_points(np.ones(320), body.tets[:, 1:], len(body.points))[1:]  # about equal triangles
    assert np.corrcoef(area, pulls.strengths[:half])[0, 1] > 0.5


def plates(facing, body):
    """Lower faces of a block of cubes matched with a plate 0.5 mm below; True where it faces the same way."""
    surface = body.interfaces
    low = surface.triangles[(surface.points[surface.triangles][:, :, 2] == 0).all(axis=1)]
    plate = surface.points - (0.0, 0.0, 0.5)
    left = plate[low].mean(axis=1)[:, 0] < 2
    turned = np.where((left & ~facing[0]) | (~left & ~facing[1]), True, False)
    target = np.where(turned[:, None], low[:, ::-1], low)
    one = np.ones(len(low))
    pattern = blocksystem.pattern_of(np.array(body.tets), len(body.points))
    return Matcher(
        (Patch("1", low, target, one, one),), np.array(body.points), plate, pattern=pattern, across=1
    )


@pytest.mark.parametrize(("facing", "rejected"), [((True, True), 0.0), ((False, False), 1.0)])
def test_matches_whose_normals_disagree_do_not_count(facing, rejected):
    body = cubes(np.ones((4, 4, 2), int))
    pulls, residual = plates(np.array(facing), body).match(np.array(body.points))
    assert residual.rejected == pytest.approx(rejected, abs=1e-12)
    assert residual.rms_mm == pytest.approx(0.5 * (1 - rejected), abs=1e-12)
    assert np.isfinite(observations.misfit(pulls, np.array(body.points)))


def test_the_rejected_share_is_a_share_of_the_area():
    """Half of a 4 x 4 mm plate faces the wrong way; the points on the border between go either way."""
    body = cubes(np.ones((4, 4, 2), int))
    _, residual = plates(np.array([True, False]), body).match(np.array(body.points))
    assert 0.35 < residual.rejected < 0.65
    assert residual.rms_mm == pytest.approx(0.5)


def pulled_system(body, pulls, points):
    pattern = blocksystem.pattern_of(np.array(body.tets), len(points))
    gradient, rows = np.zeros_like(points), np.zeros((len(pattern.row_column), 3, 3), np.float32)
    value = observations.add_pull(pulls, points, pattern, gradient, rows)
    return pattern, value, gradient, rows


def test_derivatives_of_the_matches():
    """Finite differences, matches held; second ones need the right edges of faces."""
    body = lopsided()
    target = body.moved(body.points @ rotation((1, 2, 3), 8.0).T + 0.3).interfaces
    points = np.array(body.points)
    pulls, _ = matcher(body, target).match(points)
    pattern, value, gradient, rows = pulled_system(body, pulls, points)
    assert value == pytest.approx(observations.misfit(pulls, points), rel=1e-12)
    for seed in range(3):
        d = np.random.default_rng(seed).normal(size=points.shape)
        up, down = (observations.misfit(pulls, points + h * d) for h in (1e-3, -1e-3))
        assert (up - down) / 2e-3 == pytest.approx((gradient * d).sum(), rel=1e-7)
        product = np.empty_like(points)
        blocksystem.multiply(pattern.row_start, pattern.row_column, rows, d, product)
        up, down = (pulled_system(body, pulls, points + h * d)[2] for h in (1.0, -1.0))
        np.testing.assert_allclose(product, (up - down) / 2, atol=1e-6 * np.abs(product).max())


def test_edges_are_found_from_both_ends_and_missing_ones_told():
    body = cubes(np.ones((2, 1, 1), int))
    pattern = blocksystem.pattern_of(np.array(body.tets), len(body.points))
    first, second = pattern.edges.T
    np.testing.assert_array_equal(edge_numbers(pattern, second, first), np.arange(len(first)))
    far = np.array([np.lexsort(body.points.T[::-1])[0], np.lexsort(body.points.T[::-1])[-1]])
    assert edge_numbers(pattern, far[:1], far[1:]).tolist() == [-1]


def test_which_body_is_called_the_target_does_not_matter_to_the_residual():
    """Law of swapping; the two bodies have different meshes."""
    coarse, fine = ball(2), ball(3)
    fine = fine.moved(fine.points * (1.1, 1.0, 0.95) + (0.05, 0, 0))
    _, there = matcher(coarse, fine.interfaces).match(np.array(coarse.points))
    _, back = matcher(fine, coarse.interfaces).match(np.array(fine.points))
    assert there.rms_mm == pytest.approx(back.rms_mm, rel=1e-9)
    assert there.mean_mm == pytest.approx(back.mean_mm, rel=1e-9)


def test_unit_vectors():
    np.testing.assert_allclose(unit(np.array([[3.0, 0, 4], [0, 0, 0]])), [[0.6, 0, 0.8], [0, 0, 0]])
