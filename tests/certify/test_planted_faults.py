"""A sound map passes every gate; each planted fault trips the gate that is there for it."""

from dataclasses import replace

import numpy as np
import pytest
from box_of_two_labels import SIZE, box, field, moved, moved_back

from volmap.certify import certify
from volmap.certify.labels_agree import topology
from volmap.kernels.rasterise import tets_on_grid
from volmap.types import Grid, GridField, LabelVolume, LandmarkPairs, Surface, TetMesh, Verdict, VolumeMap

ALL = (
    "inverted_tets",
    "boundary_crossings",
    "boundary_distance_mm",
    "overlap",
    "volume_ratio",
    "round_trip_mm",
    "order_difference_mm",
    "field_folds",
    "check_points_mm",
    "labels_agree",
    "solve_settled",
)


def run(evidence, table):
    gates, _ = certify(evidence, table)
    return {gate.name: gate for gate in gates}


def failing(gates):
    return {name for name, gate in gates.items() if gate.verdict is Verdict.FAIL}


def with_images(evidence, images):
    return replace(evidence, map=VolumeMap(evidence.map.mesh, images))


def test_a_sound_map_passes_every_gate(sound, table):
    gates = run(sound, table)
    assert tuple(gates) == ALL
    assert {name: gate.verdict for name, gate in gates.items()} == dict.fromkeys(ALL, Verdict.PASS)
    assert "one-to-one" in gates["boundary_crossings"].sentence
    assert all(gate.limit_source and gate.sentence for gate in gates.values())


def test_values_of_the_sound_map_are_those_of_its_formula(sound, table):
    gates = run(sound, table)
    ratio = np.linalg.det([[1.1, 0.2, 0.0], [0.0, 0.9, 0.1], [0.1, 0.0, 1.05]])
    for key in ("min", "p0_1", "p99_9", "max", "overall"):
        assert gates["volume_ratio"].value[key] == pytest.approx(ratio, rel=1e-9)
    assert gates["check_points_mm"].value["mean"] == pytest.approx(0.5, abs=1e-9)
    assert gates["order_difference_mm"].value["max"] < 1e-9
    assert gates["order_difference_mm"].value["coverage"] == pytest.approx(1.0)
    assert gates["round_trip_mm"].value["max"] < 1e-5
    assert gates["boundary_distance_mm"].value["max"] < 1e-9
    assert gates["labels_agree"].value["source"] == {
        "1": {"pieces": 1, "euler": 1},
        "2": {"pieces": 1, "euler": 1},
    }


def test_gates_without_evidence_are_not_assessed(sound, table):
    bare = replace(sound, forward=None, backward=None, other=None, checks=None, status=None)
    gates = run(bare, table)
    silent = {name for name, gate in gates.items() if gate.verdict is Verdict.NOT_ASSESSED}
    assert silent == {
        "round_trip_mm",
        "order_difference_mm",
        "field_folds",
        "check_points_mm",
        "solve_settled",
    }
    assert all(gates[name].value is None and "Not assessed" in gates[name].sentence for name in silent)


def test_a_tet_pushed_through_its_neighbour(sound, table):
    mesh = sound.map.mesh
    inner = int(np.argmin(np.linalg.norm(mesh.points - [4, 6, 4], axis=1)))
    images = sound.map.images.copy()
    images[inner] += [3.0, 0, 0]
    gates = run(with_images(sound, images), table)
    assert failing(gates) == {"inverted_tets", "volume_ratio"}  # a negative ratio is the same fault again
    gate = gates["inverted_tets"]
    assert gate.value["in_mesh"] == 0
    assert gate.value["in_image"] == gate.value["count"] > 0
    assert gate.where[0]["space"] == "target"
    assert np.linalg.norm(np.array(gate.where[0]["point_mm"]) - images[inner]) < 4
    assert not any("one-to-one" in g.sentence for g in gates.values())


def test_a_lenient_table_does_not_make_a_map_one_to_one(sound, table):
    """Words follow what was counted, not what a user's own table allows."""
    images = sound.map.images.copy()
    images[int(np.argmin(np.linalg.norm(sound.map.mesh.points - [4, 6, 4], axis=1)))] += [3.0, 0, 0]
    limits = {name: replace(limit, warn={}, fail={}) for name, limit in table.limits.items()}
    gates = run(with_images(sound, images), replace(table, limits=limits))
    assert gates["inverted_tets"].verdict is Verdict.PASS
    assert not any("one-to-one" in g.sentence for g in gates.values())


def test_an_exactly_flat_tet_counts(sound, table):
    mesh = sound.map.mesh
    corner = mesh.tets[0]
    images = sound.map.images.copy()
    images[corner[3]] = images[corner[0]]
    gates = run(with_images(sound, images), table)
    assert gates["inverted_tets"].verdict is Verdict.FAIL
    assert any("is flat" in p["note"] for p in gates["inverted_tets"].where)


def ring(turns):
    """A long bar bent into a ring of that many turns; every tet stays positive."""
    bar = box((48, 2, 2), (60.0, 3.0, 3.0))
    angle = bar.points[:, 0] / 60.0 * 2 * np.pi * turns
    radius = 12.0 - bar.points[:, 1]
    images = np.stack([radius * np.sin(angle), -radius * np.cos(angle), bar.points[:, 2]], axis=1)
    return VolumeMap(bar, images)


def own_evidence(sound, volume_map):
    """The map held against itself, so that only its own shape can fail."""
    mesh, image = volume_map.mesh, volume_map.image_mesh
    return replace(
        sound,
        map=volume_map,
        source=drawn(mesh),
        target=drawn(image),
        source_surface=mesh.interfaces,
        target_surface=image.interfaces,
        forward=None,
        backward=None,
        other=None,
        checks=None,
    )


def drawn(mesh):
    low = mesh.points.min(axis=0) - 2.0
    shape = tuple(int(n) for n in np.ceil((mesh.points.max(axis=0) + 2.0 - low) / 0.5))
    affine = np.diag([0.5, 0.5, 0.5, 1.0])
    affine[:3, 3] = low + 0.123
    grid = Grid(shape, affine)
    return LabelVolume(
        grid, (tets_on_grid(grid.to_index(mesh.points), mesh.tets, shape) >= 0).astype(np.uint16)
    )


def test_a_ring_that_closes_beyond_a_full_turn_crosses_itself(sound, table):
    """All tets positive and yet not one-to-one: the reason for the second exact gate."""
    gates = run(own_evidence(sound, ring(0.9)), table)
    assert failing(gates) == set()
    gates = run(own_evidence(sound, ring(1.1)), table)
    assert failing(gates) == {"boundary_crossings", "labels_agree"}  # drawn, it is a ring with a handle
    assert gates["inverted_tets"].verdict is Verdict.PASS
    assert gates["boundary_crossings"].where
    assert not any("one-to-one" in g.sentence for g in gates.values())


def test_a_piece_inside_another_is_found_without_any_crossing(sound, table):
    large, small = box((3, 3, 3), (10.0, 10, 10)), box((2, 2, 2), (4.0, 4, 4), origin=(14.0, 3, 3))
    n = len(large.points)
    both = TetMesh(
        np.concatenate([large.points, small.points]),
        np.concatenate([large.tets, small.tets + n]),
        np.concatenate([large.labels, small.labels]),
    )
    images = both.points.copy()
    assert failing(run(own_evidence(sound, VolumeMap(both, images)), table)) == set()
    images[n:, 0] -= 11.0
    gates = run(own_evidence(sound, VolumeMap(both, images)), table)
    gate = gates["boundary_crossings"]
    assert gate.verdict is Verdict.FAIL
    assert (gate.value["buried_parts"], gate.value["crossing_pairs"]) == (1, 0)
    assert "the boundary lies inside tet" in gate.where[0]["note"]


def test_a_tet_that_is_there_twice(sound, table):
    mesh = sound.map.mesh
    twice = TetMesh(mesh.points, np.r_[mesh.tets, mesh.tets[40:41]], np.r_[mesh.labels, mesh.labels[40]])
    gates = run(replace(sound, map=VolumeMap(twice, sound.map.images)), table)
    assert failing(gates) == {"boundary_crossings"}
    assert gates["boundary_crossings"].value["wrong_faces"] >= 1


def test_a_doctored_field_folds(sound, table):
    u = sound.forward.displacement.copy()
    u[8, 8, 6] += [2.5, 0, 0]
    gates = run(replace(sound, forward=GridField(sound.forward.grid, u)), table)
    assert failing(gates) == {"field_folds"}
    assert gates["field_folds"].value["backward"]["folded"] == 0
    there = sound.forward.grid.to_world(np.array([[8.0, 8, 6]]))[0]
    assert np.linalg.norm(np.array(gates["field_folds"].where[0]["point_mm"]) - there) < 2


def test_fields_that_are_not_a_pair(sound, table):
    u = sound.backward.displacement + np.float32([0, 1.0, 0])
    gates = run(replace(sound, backward=GridField(sound.backward.grid, u)), table)
    assert failing(gates) == {"round_trip_mm"}
    # Back and then forward comes back by F (0, 1, 0), forward and then back by (0, 1, 0) itself.
    value = gates["round_trip_mm"].value
    assert value["forward_then_backward"]["mean"] == pytest.approx(1.0, abs=1e-5)
    assert value["backward_then_forward"]["mean"] == pytest.approx(np.hypot(0.2, 0.9), abs=1e-5)


def test_a_map_that_misses_the_boundary(sound, table):
    gates = run(with_images(sound, sound.map.images + np.full(3, 1.6)), table)
    assert {"boundary_distance_mm", "overlap", "order_difference_mm"} <= failing(gates)
    assert not {"inverted_tets", "boundary_crossings", "labels_agree"} & failing(gates)
    assert gates["boundary_distance_mm"].where[0]["space"] == "target"


def test_a_map_solved_the_other_way_round_is_measured_in_source(sound, table):
    """The mesh may be the fitted side: its surface is then wrong in SOURCE and trivial in TARGET."""
    off = sound.map.mesh.moved(sound.map.mesh.points + np.full(3, 1.6))
    gates = run(replace(sound, map=VolumeMap(off, sound.map.images)), table)
    assert "boundary_distance_mm" in failing(gates)
    assert gates["boundary_distance_mm"].where[0]["space"] == "source"


def test_the_two_orders_differ_by_what_was_planted(sound, table):
    other = sound.other
    shifted = VolumeMap(other.mesh, other.images + np.array([0.3, 0, 0.4]))
    value = run(replace(sound, other=shifted), table)["order_difference_mm"].value
    for key in ("mean", "p50", "p95", "max"):
        assert value[key] == pytest.approx(0.5, abs=1e-9)
    far = VolumeMap(other.mesh, other.images + np.array([1.2, 0, 0]))
    assert failing(run(replace(sound, other=far), table)) == {"order_difference_mm"}


def test_solves_drawn_together_are_measured_as_they_were_alone_too(sound, table):
    other = sound.other
    shifted = VolumeMap(other.mesh, other.images + np.array([0.3, 0, 0.4]))
    gate = run(replace(sound, alone=(sound.map, shifted)), table)["order_difference_mm"]
    assert gate.value["max"] < 1e-9
    assert gate.value["alone"]["mean"] == pytest.approx(0.5, abs=1e-9)
    assert gate.verdict is Verdict.WARN  # half a millimetre is half a voxel; 0.35 warns
    assert "independent measure" in gate.sentence
    far = VolumeMap(other.mesh, other.images + np.array([1.2, 0, 0]))
    assert failing(run(replace(sound, alone=(sound.map, far)), table)) == {"order_difference_mm"}
    single = run(sound, table)["order_difference_mm"]
    assert "alone" not in single.value
    assert "drawn together" not in single.sentence


def test_check_points_are_judged_and_guides_are_not(sound, table):
    points = np.array([[4.0, 5, 5], [8, 6, 5], [100, 0, 0]])
    pairs = LandmarkPairs(
        ("good", "guide", "far"),
        points,
        moved(points) + np.array([[0, 0, 1], [9, 0, 0], [0, 0, 0]]),
        ("check", "guide", "check"),
    )
    gate = run(replace(sound, checks=pairs), table)["check_points_mm"]
    assert gate.value["per_point"] == {"good": pytest.approx(1.0)}
    assert gate.value["outside"] == ["far"]
    assert gate.verdict is Verdict.PASS
    bad = LandmarkPairs(("bad",), points[:1], moved(points[:1]) + np.array([0, 5.5, 0]))
    assert failing(run(replace(sound, checks=bad), table)) == {"check_points_mm"}
    guides = LandmarkPairs(("g",), points[:1], moved(points[:1]), ("guide",))
    assert run(replace(sound, checks=guides), table)["check_points_mm"].verdict is Verdict.NOT_ASSESSED


def test_a_label_that_one_side_lacks(sound, table):
    labels = np.where(sound.target.labels == 2, 1, sound.target.labels).astype(np.uint16)
    gates = run(replace(sound, target=LabelVolume(sound.target.grid, labels)), table)
    assert {"labels_agree", "overlap"} == failing(gates)
    assert "far half is in source only" in gates["labels_agree"].sentence.lower()


def test_a_label_in_more_pieces_or_with_a_hole_fails(sound, table):
    labels = sound.target.labels.copy()
    labels[0, 0, 0] = 1
    gates = run(replace(sound, target=LabelVolume(sound.target.grid, labels)), table)
    assert gates["labels_agree"].verdict is Verdict.FAIL
    assert gates["labels_agree"].value["target"]["1"] == {"pieces": 2, "euler": 2}
    middle = sound.target.grid.to_index(moved(np.array([[4.0, 6, 5]]))).round().astype(int)[0]
    labels = sound.target.labels.copy()
    labels[tuple(middle)] = 0
    gates = run(replace(sound, target=LabelVolume(sound.target.grid, labels)), table)
    assert gates["labels_agree"].value["target"]["1"] == {"pieces": 1, "euler": 2}
    assert gates["labels_agree"].verdict is Verdict.FAIL


def test_pieces_and_euler_numbers_are_those_of_six_neighbours():
    """Two voxels that share an edge only: two pieces, Euler number 2 (with 26 neighbours both would be 1)."""
    two = np.zeros((2, 2, 1), bool)
    two[0, 0, 0] = two[1, 1, 0] = True
    assert topology(two) == (2, 2)
    ring_of_voxels = np.ones((3, 3, 1), bool)
    ring_of_voxels[1, 1] = False
    assert topology(ring_of_voxels) == (1, 0)


def test_a_part_of_the_scan_that_the_map_never_reaches(sound, table):
    """Seen from the map every distance is 0; only the way back finds the part that was left out."""
    scan, n = sound.target_surface, len(sound.target_surface.points)
    part = box((1, 1, 1), (2.0, 2, 2), origin=(60, 0, 0)).interfaces
    more = Surface(
        np.r_[scan.points, part.points],
        np.r_[scan.triangles, part.triangles + n],
        np.r_[scan.sides, part.sides],
    )
    gate = run(replace(sound, target_surface=more), table)["boundary_distance_mm"]
    assert gate.verdict is Verdict.FAIL
    rows = gate.value["per_label"]["target"]["1"]
    assert rows["map_to_scan"]["max"] < 1e-9
    assert rows["scan_to_map"]["max"] > 30
    assert gate.where[0]["point_mm"][0] > 55


@pytest.mark.parametrize("space", ["source", "target"])
def test_overlap_is_measured_on_both_grids(sound, table, space):
    """Labels pushed three voxels along k: in SOURCE 7 of 10 slices stay, and so Dice is 0.7."""
    volume = getattr(sound, space)
    pushed = LabelVolume(volume.grid, np.roll(volume.labels, 3, axis=2))
    gate = run(replace(sound, **{space: pushed}), table)["overlap"]
    other = {"source": "target", "target": "source"}[space]
    assert gate.value["per_label"][other]["1"]["dice"] > 0.98
    assert (
        gate.value["lowest_dice"]
        == min(row["dice"] for row in gate.value["per_label"][space].values())
        < 0.85
    )
    if space == "source":
        assert gate.value["per_label"]["source"]["1"]["dice"] == pytest.approx(0.7)


def test_the_handedness_of_a_grid_is_no_fold(sound, table):
    """SOURCE's grid is left-handed, TARGET's right-handed; the sound map folds on neither."""
    assert (sound.source.grid.handedness, sound.target.grid.handedness) == ("left", "right")
    mirrored = field(sound.source, lambda x: moved(x * [-1, 1, 1]), ("source", "target"))
    gates = run(replace(sound, forward=mirrored), table)
    assert (
        gates["field_folds"].value["forward"]["folded"]
        == gates["field_folds"].value["forward"]["cubes"]
        > 500
    )


def test_half_a_voxel_warns(sound, table):
    """A shift of about half a voxel is a warning of the boundary gate and no failure."""
    gates = run(with_images(sound, sound.map.images + np.full(3, 0.6)), table)
    assert gates["boundary_distance_mm"].verdict is Verdict.WARN
    assert gates["boundary_distance_mm"].value["mean"] / sound.voxel_mm == pytest.approx(0.55, abs=0.15)


def test_sizes_are_those_the_conftest_promises():
    mesh = box((8, 6, 5), SIZE, split=8.0)
    assert (mesh.volumes > 0).all()
    assert mesh.volumes.sum() == pytest.approx(SIZE.prod())
    assert np.allclose(moved_back(moved(mesh.points)), mesh.points)
