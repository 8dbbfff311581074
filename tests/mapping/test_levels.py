"""From coarse to fine: what is carried, what is made valid, and that the answer stays the same."""

import numpy as np
import pytest
from hand_made_bodies import cubes

from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.predicates import orientation_signs
from volmap.mapping import Bodies, MapSettings, map_mesh, solve
from volmap.mapping.contact import Contact
from volmap.mapping.levels import carried, facet_noise_mm, valid_start
from volmap.mapping.objective import Objective
from volmap.types import Surface, TetMesh

COARSE = cubes(np.ones((4, 4, 4), int))


def fine(k=2):
    body = cubes(np.ones((4 * k, 4 * k, 4 * k), int))
    return TetMesh(body.points / k, body.tets, body.labels)


def test_an_affine_map_is_carried_exactly_also_beyond_the_mesh():
    affine = np.array([[1.1, 0.2, 0.0], [0.0, 0.8, 0.1], [0.3, 0.0, 1.2]])
    queries = np.random.default_rng(0).uniform(-0.4, 4.4, (200, 3))
    images = carried(COARSE, np.array(COARSE.points) @ affine.T, queries)
    np.testing.assert_allclose(images, queries @ affine.T, atol=1e-12)


def objective_with_contact(mesh):
    contact = Contact(mesh.interfaces, reach_mm=0.05)
    return Objective(np.array(mesh.points), np.array(mesh.tets), energy="soft-tissue", contact=contact)


def test_a_valid_start_is_taken_as_it_is():
    mesh = fine()
    points = np.array(mesh.points)
    wanted = 1.1 * points
    assert valid_start(objective_with_contact(mesh), points, wanted, unit=1.0) is wanted


def test_an_inverted_start_is_made_valid():
    """Exact signs; most points end near where they were wanted."""
    mesh = fine()
    points = np.array(mesh.points)
    wanted = points @ np.diag((1.2, 0.9, 1.0))
    inside = np.flatnonzero((np.abs(points - 2.0) < 0.9).all(axis=1))
    wanted[inside] += np.random.default_rng(1).normal(scale=0.8, size=(len(inside), 3))
    assert (orientation_signs(wanted, np.array(mesh.tets)) < 0).sum() > 20
    found = valid_start(objective_with_contact(mesh), points, wanted, unit=6.0)
    assert (orientation_signs(found, np.array(mesh.tets)) > 0).all()
    others = np.setdiff1d(np.arange(len(points)), inside)
    assert np.median(np.linalg.norm(found - wanted, axis=1)[others]) < 0.1


def test_a_start_that_crosses_itself_is_made_embedded():
    """Two arms of a U, wanted through each other."""
    blocks = np.ones((5, 1, 4), int)
    blocks[1:4, :, 1:] = 0
    mesh = cubes(blocks)
    points = np.array(mesh.points)
    outer = mesh.interfaces.triangles
    wanted = points.copy()
    high = points[:, 2] > 1
    wanted[:, 0] += np.where(high, (points[:, 2] - 1) * np.where(points[:, 0] < 2.5, 1.1, -1.1), 0.0)
    assert len(triangle_crossings(wanted, outer)) > 0
    found = valid_start(objective_with_contact(mesh), points, wanted, unit=4.0)
    assert len(triangle_crossings(found, outer)) == 0
    assert (orientation_signs(found, np.array(mesh.tets)) > 0).all()


def test_noise_of_facets_on_a_sphere():
    """Closed form: a facet of edge a lies a^2 / (6 R) below the sphere at its centre."""
    coarse, finer = (sphere(k) for k in (2, 5))
    edge = np.linalg.norm(np.diff(coarse.points[coarse.triangles][:, :2], axis=1), axis=2).mean()
    expected = np.sqrt(0.6) * edge**2 / (6 * 10.0)
    assert facet_noise_mm(coarse, finer) == pytest.approx(expected, rel=0.15)


def sphere(halvings):
    """An octahedron halved so many times, its points on a sphere of 10 mm, as the boundary of one label."""
    points = np.array([[1.0, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]])
    triangles = np.array(
        [[0, 2, 4], [2, 1, 4], [1, 3, 4], [3, 0, 4], [2, 0, 5], [1, 2, 5], [3, 1, 5], [0, 3, 5]]
    )
    for _ in range(halvings):
        corners = points[triangles]
        middles = 0.5 * (corners + np.roll(corners, -1, axis=1))
        a, b, c = corners.swapaxes(0, 1)
        ab, bc, ca = middles.swapaxes(0, 1)
        soup = np.concatenate(
            [np.stack(t, axis=1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))]
        )
        soup /= np.linalg.norm(soup, axis=2, keepdims=True)
        points, inverse = np.unique(soup.reshape(-1, 3).round(9), axis=0, return_inverse=True)
        triangles = inverse.reshape(-1, 3)
    return Surface(10.0 * points, triangles, np.tile((1, 0), (len(triangles), 1)))


def test_the_answer_does_not_hang_on_the_coarse_start(monkeypatch):
    """The same minimum from a coarse start as from the alignment, in no more steps on the fine mesh."""
    mesh = fine(3)
    bent = np.array(mesh.points)
    bent[:, 0] += 0.15 * (bent[:, 2] - 2) ** 2
    target = TetMesh(bent, mesh.tets, mesh.labels).interfaces
    small = np.array(COARSE.points)
    small[:, 0] += 0.15 * (small[:, 2] - 2) ** 2
    coarse = Bodies(COARSE, TetMesh(small, COARSE.tets, COARSE.labels).interfaces)
    settings = MapSettings(uncertainty_mm=0.03)
    monkeypatch.setattr(solve, "FEWEST_TETS", len(COARSE.tets))
    alone = map_mesh(mesh, target, settings).outcome
    through = map_mesh(mesh, target, settings, coarser=(coarse,)).outcome
    assert through.status is alone.status
    assert {h.tets for h in through.history} == {len(COARSE.tets), len(mesh.tets)}
    assert sum(h.tets == len(mesh.tets) for h in through.history) <= len(alone.history)
    gap = np.linalg.norm(through.map.images - alone.map.images, axis=1)
    assert gap.mean() < 0.03


def test_a_mesh_of_few_tets_is_no_start():
    """Nothing is gained on a mesh whose facets are all one sees: the solve is that of the fine mesh alone."""
    coarse = Bodies(COARSE, COARSE.interfaces)
    outcome = map_mesh(COARSE, COARSE.interfaces, coarser=(coarse,)).outcome
    assert len(COARSE.tets) < solve.FEWEST_TETS
    assert len(outcome.history) == len(map_mesh(COARSE, COARSE.interfaces).outcome.history)
