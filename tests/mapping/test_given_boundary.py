"""A given boundary: insides known in closed form, tolerance as a law, maps no body can follow."""

import numpy as np
import pytest
from hand_made_bodies import cubes, lopsided, rotation

from volmap.kernels.predicates import orientation_signs
from volmap.mapping import MapSettings, climbing, map_mesh
from volmap.mapping.given_boundary import KeptBoundary
from volmap.types import GivenBoundary, InputError, Status

SHIFT = np.array([30.0, -20.0, 10.0])


def rounded(n=7, size_mm=2.0):
    """A block whose corners are rounded off; a quarter turn about z lays it on itself."""
    block = cubes(np.ones((n, n, n), int), size_mm, (-n * size_mm / 2,) * 3)
    p = np.array(block.points)
    length = np.maximum(np.linalg.norm(p, axis=1), 1e-9)
    return block.moved(p * (0.5 + 0.5 * np.abs(p).max(axis=1) / length)[:, None])


BODY = rounded()
MIXED = lopsided()


def given_of(mesh, images, tolerance_mm, *, outer_only=True, keep=None):
    """The mesh's own outer boundary (or every label surface) with images at its points."""
    surface = mesh.interfaces
    triangles = surface.triangles[surface.sides[:, 1] == 0] if outer_only else surface.triangles
    if keep is not None:
        triangles = triangles[keep(mesh.points[triangles].mean(axis=1))]
    return GivenBoundary(mesh.points, triangles, images, tolerance_mm, 1.0)


def solved(mesh, given, target, **settings):
    return map_mesh(mesh, target.interfaces, MapSettings(**settings), given=given, other_tolerances=False)


@pytest.mark.parametrize("degrees", [90.0, 180.0])
def test_a_turn_of_the_boundary_turns_the_inside(degrees):
    """Closed form; a turn by 90 degrees leaves the body's surface as it is, so only the file can know it."""
    turned = BODY.points @ rotation((0, 0, 1), degrees).T + SHIFT
    outcome = solved(BODY, given_of(BODY, turned, 0.1), BODY.moved(BODY.points + SHIFT)).outcome
    assert outcome.status is Status.SETTLED
    assert np.abs(outcome.map.images - turned).max() < 1e-6
    assert outcome.history[-1].distortion < 1e-12
    alone = map_mesh(BODY, BODY.moved(BODY.points + SHIFT).interfaces).outcome.map.images
    assert np.linalg.norm(alone - turned, axis=1).max() > 5.0


@pytest.mark.parametrize("mesh", [BODY, MIXED])
def test_an_affine_boundary_gives_that_affine_inside(mesh):
    """Patch test: affine boundary data on any mesh have the affine inside, for every isotropic energy."""
    affine = np.array([[1.4, 0.3, 0.0], [0.0, 0.8, 0.1], [0.1, 0.0, 1.05]])
    moved = mesh.points @ affine.T + SHIFT
    outcome = solved(mesh, given_of(mesh, moved, 1e-3), mesh.moved(moved)).outcome
    assert outcome.status is Status.SETTLED
    assert np.linalg.norm(outcome.map.images - moved, axis=1).max() <= 1e-3
    np.testing.assert_allclose(outcome.map.volume_ratio, np.linalg.det(affine), rtol=5e-3)


def twisted(points, rate):
    """x turned about z by rate * z: J = 1 everywhere (recomputed: det of the gradient)."""
    angle = rate * points[:, 2]
    c, s = np.cos(angle), np.sin(angle)
    x, y, z = points.T
    return np.stack([c * x - s * y, s * x + c * y, z], axis=1)


def test_a_twisted_boundary_twists_the_inside():
    """Closed form of the boundary and of the inside: the axis stays, J is 1 in the mean, the inside turns."""
    moved = twisted(BODY.points, 0.06)
    outcome = solved(BODY, given_of(BODY, moved, 0.05), BODY.moved(moved)).outcome
    assert outcome.status is Status.SETTLED
    error = np.linalg.norm(outcome.map.images - moved, axis=1)
    inner = np.setdiff1d(np.arange(len(BODY.points)), BODY.interfaces.triangles)
    assert error.max() < 0.3  # of moves up to 3 mm
    assert error[inner].mean() < 0.1 * np.linalg.norm(moved - BODY.points, axis=1)[inner].mean()


def test_inner_surfaces_are_kept_where_the_file_covers_them():
    """A file with the label surface too, slid along itself: only the file can know it."""
    wave = MIXED.points + 0.3 * np.sin(MIXED.points[:, [1, 2, 0]] / 2.0)
    given = given_of(MIXED, wave, 0.02, outer_only=False)
    outcome = solved(MIXED, given, MIXED.moved(wave)).outcome
    rows = np.unique(MIXED.interfaces.triangles)
    assert outcome.status is Status.SETTLED
    assert np.linalg.norm(outcome.map.images - wave, axis=1)[rows].max() <= 0.02


def test_what_the_file_does_not_cover_is_matched_with_the_target():
    """The lower half given as a quarter turn, the upper half follows; its surface lies on the target's."""
    turned = BODY.points @ rotation((0, 0, 1), 90).T
    given = given_of(BODY, turned, 0.1, keep=lambda centres: centres[:, 2] < 0)
    outcome = solved(BODY, given, BODY).outcome
    assert outcome.status is Status.SETTLED
    assert np.linalg.norm(outcome.map.images - turned, axis=1).max() < 1.5


def laps(points):
    """Images of a boundary whose side x > 0 is reflected across y = 0 within a patch: no body can follow."""
    images = points.copy()
    patch = (points[:, 0] > 0.8 * points[:, 0].max()) & (np.abs(points[:, 1:]) < 3).all(axis=1)
    images[patch, 1] *= -1
    return images, patch


@pytest.mark.parametrize("fault", ["patch reversed", "two points swapped", "inside out"])
def test_a_map_no_body_can_follow_keeps_every_tet_positive(monkeypatch, fault):
    """Exact signs at every iterate; the status says that it was not kept, the places say where."""
    images, patch = laps(np.array(BODY.points))
    if fault == "two points swapped":
        images = np.array(BODY.points)
        a = int(np.argmax(images @ (1, 0.01, 0.02)))
        near = np.unique(BODY.interfaces.triangles[(BODY.interfaces.triangles == a).any(axis=1)])
        b = int(near[near != a][0])
        images[[a, b]] = images[[b, a]]
        patch = np.isin(np.arange(len(images)), near)
    if fault == "inside out":
        images = BODY.points * (1, 1, -1)
        patch = np.ones(len(images), bool)
    iterates = []
    step = climbing.step

    def recorded(solver, state):
        result = step(solver, state)
        iterates.append(state.images)
        return result

    monkeypatch.setattr(climbing, "step", recorded)
    given = given_of(BODY, images, 0.1)
    outcome = solved(BODY, given, BODY, most_steps=40).outcome
    assert all((orientation_signs(x, BODY.tets) > 0).all() for x in iterates)
    assert not outcome.status.finished
    kept = KeptBoundary(BODY, given)
    deviation = kept.deviations(outcome.map.images)
    worst = kept.rows[np.argsort(-deviation)[:2]]
    assert np.sort(deviation)[-2] > 0.1
    apart = np.linalg.norm(BODY.points[worst][:, None] - BODY.points[patch][None], axis=2).min(axis=1)
    assert apart[0] <= 2.0  # the worst within an edge of the mesh, the next one within two
    assert apart[1] <= 4.0


def test_a_looser_tolerance_never_costs_more():
    """Law: the maps within a tolerance hold those within a smaller one: the least distortion cannot grow."""
    moved = twisted(BODY.points, 0.06) + 0.2 * np.sin(BODY.points[:, [1, 2, 0]])
    outcome = map_mesh(
        BODY, BODY.moved(moved).interfaces, MapSettings(), given=given_of(BODY, moved, 0.2)
    ).outcome
    rows = outcome.giving_way
    assert [row.tolerance_mm for row in rows] == [0.0, 0.1, 0.2, 0.4, 0.8]
    assert all(row.kept and row.max_mm <= max(row.tolerance_mm, 0.02) for row in rows)
    distortion = [row.distortion for row in rows]
    assert (np.diff(distortion) < 0).all()
    assert distortion[-1] < 0.5 * distortion[0]
    assert rows[2].distortion == outcome.history[-1].distortion
    assert rows[2].smallest_ratio == pytest.approx(outcome.map.volume_ratio.min(), rel=1e-9)


def test_reversed_it_gives_the_inverse():
    """Law of order: the correspondence reversed, on the moved body, brings the points back."""
    moved = twisted(BODY.points, 0.05)
    body, target = BODY.moved(moved), BODY
    given = given_of(BODY, moved, 0.01).reversed()
    outcome = solved(body, given, target).outcome
    assert outcome.status is Status.SETTLED
    assert np.linalg.norm(outcome.map.images - BODY.points, axis=1).max() < 0.2


def test_the_pull_is_the_derivative_of_the_squared_excess():
    """Closed form (d - zone)^2: nothing inside the zone, gradient 2 share (d - zone) outward."""
    from volmap.kernels.observations import misfit

    kept = KeptBoundary(BODY, given_of(BODY, np.array(BODY.points), 1.0))
    rng = np.random.default_rng(3)
    images = BODY.points + rng.normal(size=BODY.points.shape)
    distance = kept.deviations(images)
    pulls = kept.pulls(images)
    assert misfit(pulls, images) == pytest.approx(
        float(kept.share @ np.maximum(distance - 0.9, 0) ** 2), rel=1e-12
    )
    assert (pulls.strengths[distance <= 0.9] == 0).all()
    assert (distance <= 0.9).any()


def test_a_surface_elsewhere_is_refused():
    given = given_of(BODY, np.array(BODY.points), 0.1)
    with pytest.raises(InputError, match="no part of the body's boundary") as caught:
        KeptBoundary(BODY.moved(BODY.points + 100.0), given)
    assert caught.value.refused
