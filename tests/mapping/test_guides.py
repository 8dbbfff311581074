"""Guides: which tet holds them, how hard they pull, and what is refused."""

import numpy as np
import pytest
from hand_made_bodies import cubes

from volmap.kernels.blocksystem import pattern_of
from volmap.mapping.guides import guide_observations, guide_rms, refuse_far_guides
from volmap.types import InputError, LandmarkPairs

BODY = cubes(np.ones((5, 4, 3), int), 2.0)
AFFINE = np.array([[1.1, 0.2, 0.0], [0.0, 0.9, 0.1], [0.1, 0.0, 1.05]])


def pulls_of(points, to_points, sd_mm=None, reach_mm=1.0):
    points = np.asarray(points, float)
    names = tuple(f"g{k}" for k in range(len(points)))
    pairs = LandmarkPairs(names, points, to_points, sd_mm=sd_mm)
    pattern = pattern_of(np.array(BODY.tets), len(BODY.points))
    refuse_far_guides(BODY, pairs, reach_mm=reach_mm)
    return guide_observations(BODY, pairs, pattern=pattern)


@pytest.mark.parametrize("where", ["inside", "outside"])
def test_an_affine_map_carries_guides_exactly(where):
    """Closed form: barycentric weights, also of a tet continued beyond its face, reproduce affine maps."""
    rng = np.random.default_rng(1)
    points = rng.uniform((0.2, 0.2, 0.2), (9.8, 7.8, 5.8), (30, 3))
    if where == "outside":
        points[:, 2] = rng.uniform(6.1, 6.9, 30)
    pulls = pulls_of(points, points @ AFFINE.T)
    assert guide_rms(pulls, BODY.points @ AFFINE.T) < 1e-12
    np.testing.assert_allclose(pulls.weights.sum(axis=1), 1.0, atol=1e-12)
    assert (pulls.weights.min() < -1e-3) == (where == "outside")
    assert np.abs(pulls.weights).max() < 2.0  # a tet of 2 mm, continued by at most 0.9 mm


def test_guides_far_outside_are_refused_by_name():
    with pytest.raises(InputError, match="outside the body") as caught:
        pulls_of([[1.0, 1, 1], [1.0, 1, 8.5]], [[1.0, 1, 1], [1, 1, 1]], reach_mm=2.0)
    assert caught.value.refused
    assert "g1" in str(caught.value.where)
    assert "2.5 mm away" in str(caught.value.found)


def test_a_guide_pulls_by_its_variance():
    """Common practice (inverse variance weights): half the deviation, four times the strength."""
    pulls = pulls_of([[1.0, 1, 1], [5, 5, 5]], [[1.0, 1, 1], [5, 5, 5]], sd_mm=[1.0, 2.0])
    np.testing.assert_allclose(pulls.strengths, [0.8, 0.2])
    np.testing.assert_array_equal(pulls.across, 1.0)


def test_rms_of_guides_at_a_distance():
    """Closed form: everything 3 mm away is 3 mm rms, whatever the deviations."""
    points = np.array([[1.0, 1, 1], [5, 5, 5]])
    pulls = pulls_of(points, np.add(points, (0, 0, 3.0)), sd_mm=[0.5, 2.0])
    assert guide_rms(pulls, BODY.points) == pytest.approx(3.0)


def test_edges_of_a_guide_are_those_of_its_tet():
    pulls = pulls_of([[1.3, 2.2, 3.1]], [[0.0, 0, 0]])
    edges = pattern_of(np.array(BODY.tets), len(BODY.points)).edges[pulls.edges[0]]
    c = pulls.corners[0]
    pairs = [(0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3)]
    np.testing.assert_array_equal(edges, [sorted((c[a], c[b])) for a, b in pairs])
