"""The gate of a given boundary on an affine map: deviations known in closed form, planted faults found."""

from dataclasses import replace

import numpy as np
import pytest
from box_of_two_labels import SIZE, box, moved

from volmap.certify import certify
from volmap.certify.surface_faults import surface_faults
from volmap.types import GivenBoundary, GivingWay, Verdict

BOX = box((8, 6, 5), SIZE, split=8.0)


def given_of(images, *, tolerance_mm=0.25, keep=None):
    surface = BOX.interfaces
    triangles = surface.triangles[surface.sides[:, 1] == 0]
    if keep is not None:
        triangles = triangles[keep(BOX.points[triangles].mean(axis=1))]
    return GivenBoundary(BOX.points, triangles, images, tolerance_mm, 1.5, "g.vtp")


def gate_of(evidence, table, given, **changes):
    gates, _ = certify(replace(evidence, given=given, **changes), table)
    return next(gate for gate in gates if gate.name == "given_boundary_mm")


def test_without_one_there_is_no_gate(sound, table):
    gates, _ = certify(sound, table)
    assert "given_boundary_mm" not in {gate.name for gate in gates}


def test_the_map_itself_is_kept_exactly(sound, table):
    gate = gate_of(sound, table, given_of(moved(BOX.points)))
    assert gate.verdict is Verdict.PASS
    assert gate.value["max"] < 1e-12
    assert gate.value["coverage"] == pytest.approx(1.0)
    assert gate.value["at_file_points"]["max"] < 1e-12
    assert gate.where == ()


@pytest.mark.parametrize(
    ("shift_mm", "verdict"), [(0.2, Verdict.PASS), (0.3, Verdict.WARN), (1.5, Verdict.FAIL)]
)
def test_a_shift_is_measured_as_it_is(sound, table, shift_mm, verdict):
    """Closed form: everything given as far off as the shift; 0.25 mm allowed, a voxel is 1 mm."""
    gate = gate_of(sound, table, given_of(np.add(moved(BOX.points), (0, shift_mm, 0))))
    for key in ("mean", "p95", "max"):
        assert gate.value[key] == pytest.approx(shift_mm)
    assert gate.value["excess"] == pytest.approx(max(0, shift_mm - 0.25))
    assert gate.verdict is verdict
    assert bool(gate.where) == (shift_mm > 0.25)


def test_solved_on_the_target_it_is_measured_in_the_source(sound, table):
    """Closed form: a shift in SOURCE of the points given, seen from TARGET's mesh."""
    given = replace(given_of(moved(BOX.points)), points=np.add(BOX.points, (0, 0, 0.3)))
    gate = gate_of(sound, table, given, solved_on="target")
    assert gate.value["max"] == pytest.approx(0.3)
    assert all(place["space"] == "source" for place in gate.where)
    first = np.array(gate.where[0]["point_mm"])
    assert np.linalg.norm(BOX.points - first, axis=1).min() < 1e-3


def test_one_point_off_is_found_at_its_place(sound, table):
    images = moved(BOX.points)
    row = int(np.argmin(np.linalg.norm(BOX.points - (8, 6, 10), axis=1)))
    images[row] += (0.0, 0.0, 1.0)
    gate = gate_of(sound, table, given_of(images))
    assert gate.value["max"] == pytest.approx(1.0)
    np.testing.assert_allclose(gate.where[0]["point_mm"], BOX.points[row], atol=1e-3)
    assert "gives way by 1.000 mm" in gate.where[0]["note"]


def test_part_of_the_boundary(sound, table):
    """Counted by hand: the top, 16 x 12 of 944 mm2."""
    given = given_of(moved(BOX.points), keep=lambda centres: centres[:, 2] > 9.99)
    gate = gate_of(sound, table, given)
    assert gate.value["coverage"] == pytest.approx(16 * 12 / 944)


def test_a_crushed_tet_is_named(sound, table):
    """A point pushed through most of its tets: kept as the file says, and distortion gathers there."""
    row = int(np.argmin(np.linalg.norm(BOX.points - (8, 6, 10), axis=1)))
    points = np.array(BOX.points)
    points[row] -= (0, 0, 1.9)  # of 2 mm to the layer below
    images = moved(points)
    volume_map = replace(sound.map, images=images)
    gate = gate_of(sound, table, given_of(images), map=volume_map)
    assert gate.value["max"] < 1e-12
    (place,) = gate.where
    assert "distortion gathers" in place["note"]
    assert np.linalg.norm(np.array(place["point_mm"]) - BOX.points[row]) < 3.0


def test_what_the_solver_told_is_passed_on(sound, table):
    row = GivingWay(0.5, True, 0.1, 0.4, 0.02, 0.7, (1.0, 2.0, 3.0))
    gate = gate_of(sound, table, given_of(moved(BOX.points)), giving_way=(row,))
    assert gate.value["giving_way"][0]["smallest_ratio"] == 0.7
    assert gate.value["giving_way"][0]["where_mm"] == [1.0, 2.0, 3.0]


def test_a_folded_edge_is_found_in_its_middle():
    """Two triangles of a flat sheet laid over each other: turned by 180 degrees about their common edge."""
    points = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [4, 4, 0]])
    images = points.copy()
    images[3] = images[0] + 0.01
    for triangles in ([[0, 1, 2], [3, 2, 1]], [[0, 1, 2], [1, 2, 3]]):
        faults = surface_faults(GivenBoundary(points, triangles, images, 0.2, 1.0))
        np.testing.assert_allclose(faults.folds, [[2, 2, 0]])
        assert faults.turned_deg[0] == pytest.approx(180, abs=1)
    assert not len(surface_faults(GivenBoundary(points, triangles, images, 5.0, 1.0)).folds)
    assert not len(surface_faults(GivenBoundary(points, triangles, points, 0.2, 1.0)).folds)


def test_a_tear_and_a_crushed_triangle_are_found():
    points = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [4, 0, 0], [4, 4, 0], [0, 4, 0]])
    triangles = [[0, 1, 2], [3, 4, 5]]
    images = np.add(points, (0, 0, 1))
    images[3] += (0, 0, 0.5)
    faults = surface_faults(GivenBoundary(points, triangles, images, 0.2, 1.0))
    np.testing.assert_allclose(faults.tears, [[4, 0, 0]])
    np.testing.assert_allclose(faults.torn_mm, [0.5])
    x = np.arange(12.0)
    strip = np.stack([x // 2, x % 2, np.zeros(12)], axis=1)
    triangles = np.stack([np.arange(10), np.arange(1, 11), np.arange(2, 12)], axis=1)
    flat = strip.copy()
    flat[10:, 0] = 4.004
    faults = surface_faults(GivenBoundary(strip, triangles, flat, 0.2, 1.0))
    assert len(faults.crushed) == 2
    np.testing.assert_allclose(faults.shrunk, 0.004)
