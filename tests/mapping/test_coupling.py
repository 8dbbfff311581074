"""Two solves of one pair drawn together: nearer to one map, still valid, inside the declared residual."""

from dataclasses import replace

import numpy as np
import pytest
from hand_made_bodies import cubes

from volmap.kernels.locate import build_buckets, interpolate, locate
from volmap.kernels.predicates import orientation_signs
from volmap.mapping import Coupling, MapSettings, couple, map_mesh
from volmap.mapping.coupling import _Inverse
from volmap.mesh import MeshSettings, mesh
from volmap.types import Status

VOXEL_MM = 2.0
UNCERTAIN = 0.15  # of a voxel: what meshes this coarse can reach both ways


@pytest.fixture(scope="module")
def bodies(shell_phantom):
    return [mesh(visit.labels, MeshSettings(wanted_tets=3000)).mesh for visit in shell_phantom.visits[:2]]


def both(bodies, **settings):
    chosen = MapSettings(uncertainty_voxels=UNCERTAIN, start="world", **settings)
    return tuple(
        map_mesh(here, there.interfaces, chosen, voxel_mm=VOXEL_MM)
        for here, there in (bodies, reversed(bodies))
    )


@pytest.fixture(scope="module")
def alone(bodies):
    return both(bodies)


@pytest.fixture(scope="module")
def drawn(alone):
    return couple(*alone, voxel_mm=VOXEL_MM)


def apart_mm(main, other):
    """Mean over points of ``other(main(x)) - x``, where it is defined."""
    here, there = main.outcome.map, other.outcome.map
    points, tets = there.mesh.points, there.mesh.tets
    tet, where_in = locate(build_buckets(points, tets), points, tets, here.images)
    known = tet >= 0
    assert known.mean() > 0.5
    back = interpolate(tets, there.images, tet[known], where_in[known])
    return np.linalg.norm(back - here.mesh.points[known], axis=1).mean()


def test_the_two_come_nearer_to_one_map(alone, drawn):
    assert drawn.how is Coupling.DRAWN
    assert apart_mm(drawn.main, drawn.other) < 0.5 * apart_mm(*alone)
    assert apart_mm(drawn.other, drawn.main) < 0.5 * apart_mm(*alone[::-1])


def test_both_stay_valid_and_inside_the_declared_residual(drawn):
    for solved in (drawn.main, drawn.other):
        here = solved.outcome.map
        assert (orientation_signs(here.images, here.mesh.tets) > 0).all()
        assert solved.outcome.status is Status.SETTLED
        residual = solved.solver.matcher.match(np.array(here.images))[1]  # measured anew
        assert residual.rms_mm <= UNCERTAIN * VOXEL_MM
        assert [r.step for r in solved.outcome.history] == list(range(1, len(solved.outcome.history) + 1))


def test_the_truth_is_not_farther_than_before(shell_phantom, alone, drawn):
    """The phantom's own closed form at points inside the shell; errors are the mean of both solves'."""

    def error_mm(forward, backward):
        found = []
        for solved, visits in ((forward, (0, 1)), (backward, (1, 0))):
            here = solved.outcome.map
            exact = shell_phantom.truth.carry(here.mesh.points, *visits)
            known = np.isfinite(exact).all(axis=1)
            found.append(np.linalg.norm(here.images[known] - exact[known], axis=1).mean())
        return np.mean(found)

    assert error_mm(drawn.main, drawn.other) < 1.02 * error_mm(*alone)


def test_what_was_handed_in_is_not_changed(bodies, alone, drawn):
    again = both(bodies)
    for before, fresh in zip(alone, again, strict=True):
        assert np.array_equal(before.outcome.map.images, fresh.outcome.map.images)
        assert np.array_equal(before.state.images, fresh.state.images)
        assert before.state.history == fresh.state.history
        assert before.state.boundary_weight == fresh.state.boundary_weight


def test_the_same_twice_to_the_last_bit(alone, drawn):
    again = couple(*alone, voxel_mm=VOXEL_MM)
    for one, two in ((drawn.main, again.main), (drawn.other, again.other)):
        assert np.array_equal(one.outcome.map.images, two.outcome.map.images)


def test_two_answers_are_left_as_they_are(alone):
    main, other = alone
    far = replace(other, state=replace(other.state, images=other.state.images + 1.1 * VOXEL_MM))
    result = couple(main, far, voxel_mm=VOXEL_MM)
    assert result.how is Coupling.TOO_FAR
    assert (result.main, result.other) == (main, far)
    assert "more than a voxel" in result.how.value


def test_a_solve_that_stopped_early_is_left_as_it_is(bodies, alone):
    early = both(bodies, most_steps=3)[1]
    result = couple(alone[0], early, voxel_mm=VOXEL_MM)
    assert result.how is Coupling.UNFINISHED
    assert (result.main, result.other) == (alone[0], early)


def test_a_boundary_that_would_be_lost_is_kept(alone, monkeypatch):
    """With an uncertainty below what coupling leaves, and no weight left to raise."""
    main, other = alone
    for solved in alone:
        strict = replace(solved.solver.settings, last_weight=0.01)
        monkeypatch.setattr(solved.solver, "settings", strict)
        monkeypatch.setattr(solved.solver, "uncertainty_mm", 1e-3)
    result = couple(main, other, voxel_mm=VOXEL_MM)
    assert result.how is Coupling.BOUNDARY_LOST
    assert (result.main, result.other) == (main, other)


def test_the_inverse_of_an_affine_map_is_exact_beyond_the_hull_too():
    body = cubes(np.ones((3, 2, 2), int))
    linear, shift = np.array([[1.2, 0.3, 0.0], [-0.1, 0.9, 0.2], [0.0, 0.1, 1.1]]), np.array([3.0, -4.0, 5.0])
    wanted = np.random.default_rng(7).uniform(-1.0, 4.0, (200, 3))  # the body is [0, 3] x [0, 2] x [0, 2]
    found = _Inverse(body)(body.points @ linear.T + shift, wanted @ linear.T + shift)
    assert np.abs(found - wanted).max() < 1e-12 * 1e3
