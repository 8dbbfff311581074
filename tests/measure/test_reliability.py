"""Reliability: each reason planted alone, by closed forms of where it must show."""

import numpy as np
import pytest
from bodies import cubes

from volmap import measure
from volmap.measure import reliability
from volmap.types import Gate, Grid, GridField, Surface, Verdict, VolumeMap

VOXEL_MM = 1.0
SIZE = np.array([20.0, 16.0, 12.0])


def body():
    return cubes((10, 8, 6), SIZE)


def gate(name, verdict, where=(), warn=None):
    return Gate(name, None, "mm", warn, None, "none", verdict, tuple(where))


def spot(point, space="source"):
    return {"point_mm": list(point), "space": space, "note": ""}


def found(volume_map, *, gates=(), residuals=None, fields=None, alone=None):
    return reliability(
        volume_map, gates, residuals=residuals or {}, fields=fields or {}, alone=alone, voxel_mm=VOXEL_MM
    )


def reason(result, name):
    return result.against[:, list(measure.REASONS).index(name)]


def centres(mesh):
    return mesh.points[mesh.tets].mean(axis=1)


def only(result, name):
    """That reason, and nothing else speaks against anything."""
    bad = reason(result, name)
    assert (result.tets == ~bad).all()
    return bad


def test_a_sound_map_is_reliable_everywhere():
    mesh = body()
    warned = gate("overlap", Verdict.WARN, [spot([1, 1, 1])])
    result = found(VolumeMap(mesh, mesh.points + 3), gates=[gate("a", Verdict.PASS), warned])
    assert result.tets.all()
    assert result.not_assessed == ("orders",)
    assert result.failed_gates == ()


@pytest.mark.parametrize("space", ["source", "target"])
def test_near_a_place_of_a_failed_gate(space):
    mesh = body()
    shift = np.array([50.0, 0, 0])
    volume_map = VolumeMap(mesh, mesh.points + shift)
    place = np.array([5.0, 5.0, 5.0])
    told = spot(place + shift if space == "target" else place, space)
    result = found(volume_map, gates=[gate("check_points_mm", Verdict.FAIL, [told])])
    bad = only(result, "gate")
    corner = np.linalg.norm(mesh.points[mesh.tets] - place, axis=2).min(axis=1)
    centre = np.linalg.norm(centres(mesh) - place, axis=1)
    assert (bad == ((corner <= 3 * VOXEL_MM) | (centre <= 3 * VOXEL_MM))).all()
    assert 0 < bad.sum() < len(bad) / 4
    assert result.failed_gates == ("check_points_mm",)


def test_a_failed_gate_that_names_no_place_speaks_of_the_whole_map():
    mesh = body()
    result = found(VolumeMap(mesh, mesh.points), gates=[gate("overlap", Verdict.FAIL)])
    assert not result.tets.any()


def test_near_a_boundary_that_is_off():
    # the scan's top lies 1.5 mm above the map's where x > 14, on it elsewhere (and 0.5 mm is no reason)
    mesh = body()
    own = mesh.interfaces.of_label(1)
    moved = own.points.copy()
    top = moved[:, 2] == SIZE[2]
    moved[top, 2] += np.where(moved[top, 0] > 13, 1.5, 0.5)
    scan = Surface(moved, own.triangles, own.sides)
    residuals = {"source": (measure.boundary_residual(own, scan),)}
    bad = only(found(VolumeMap(mesh, mesh.points), residuals=residuals), "boundary")
    at = centres(mesh)
    assert bad[(at[:, 0] > 15) & (at[:, 2] > 10)].all()
    assert not bad[(at[:, 2] < SIZE[2] - 3 - 1.5)].any()
    assert not bad[at[:, 0] < 12 - 3 - 2].any()


def test_a_part_of_the_scan_that_no_boundary_comes_near():
    mesh = body()
    own = mesh.interfaces.of_label(1)
    spike = own.points.copy()
    tip = int(np.flatnonzero((spike == [10.0, 8.0, 12.0]).all(axis=1))[0])
    spike[tip, 2] += 4.0
    residuals = {"source": (measure.boundary_residual(own, Surface(spike, own.triangles, own.sides)),)}
    bad = only(found(VolumeMap(mesh, mesh.points), residuals=residuals), "boundary")
    at = centres(mesh)
    assert bad[np.linalg.norm(at - [10, 8, 12], axis=1) < 2].all()
    assert not bad[np.linalg.norm(at - [10, 8, 12], axis=1) > 8].any()


def test_volume_ratio_beyond_the_gates_limits_or_not_positive():
    mesh = body()
    images = mesh.points.copy()
    inner = int(np.flatnonzero((images == [10.0, 8.0, 6.0]).all(axis=1))[0])
    images[inner] += [0, 0, 1.9]  # the tets above keep 0.05 of their height
    volume_map = VolumeMap(mesh, images)
    told = {"p0_1_below": 0.1, "p99_9_above": 1.5, "min_below": 0.02}
    limits = gate("volume_ratio", Verdict.WARN, warn=told)
    bad = only(found(volume_map, gates=[limits]), "volume_ratio")
    ratio = np.linalg.det(volume_map.gradients)
    assert (bad == ((ratio < 0.1) | (ratio > 1.5))).all()
    assert bad.any()
    images[inner] += [0, 0, 0.2]  # beyond: inverted
    folded = VolumeMap(mesh, images)
    bad = only(found(folded), "volume_ratio")  # no limits at all, but a sign
    assert (bad == (np.linalg.det(folded.gradients) <= 0)).all()
    assert bad.any()


@pytest.mark.parametrize("space", ["source", "target"])
def test_tets_where_a_field_folds(space):
    mesh = body()
    affine = np.eye(4)
    affine[:3, 3] = (0.6, 0.55, 0.45)  # no centre on a face of a tet
    grid = Grid((19, 15, 11), affine)
    displacement = np.zeros((*grid.shape, 3), np.float32)
    displacement[10, 8, 6, 0] = 2.5  # jumps over its neighbour: x from 10.5 to 13
    fields = {space: GridField(grid, displacement)}
    bad = only(found(VolumeMap(mesh, mesh.points), fields=fields), "fold")
    centre = np.array([10.6, 8.55, 6.45])  # of that voxel: the folded cubes reach 1 mm from it
    corners = mesh.points[mesh.tets]
    edges = np.swapaxes(corners[:, 1:] - corners[:, :1], 1, 2)
    inner = np.linalg.solve(edges, (centre - corners[:, 0])[..., None])[..., 0]
    holds = (inner > 0).all(axis=1) & (inner.sum(axis=1) < 1)
    assert holds.sum() == 1
    assert bad[holds].all()
    apart = ((corners.min(axis=1) > centre + 1.001) | (corners.max(axis=1) < centre - 1.001)).any(axis=1)
    assert not bad[apart].any()


def test_where_the_two_orders_differ():
    mesh = body()
    there = cubes((9, 7, 5), SIZE)  # another mesh of the same body
    off = np.where(there.points[:, :1] > 10, 1.2, 0.0) * [[0, 1.0, 0]]
    alone = VolumeMap(mesh, mesh.points), VolumeMap(there, there.points + off)
    bad = only(found(VolumeMap(mesh, mesh.points), alone=alone), "orders")
    at = centres(mesh)
    assert bad[at[:, 0] > 13].all()
    assert not bad[at[:, 0] < 9].any()


def test_points_and_voxels_follow_their_tets():
    mesh = body()
    result = found(VolumeMap(mesh, mesh.points), gates=[gate("x", Verdict.FAIL, [spot([2, 2, 2])])])
    affine = np.diag([1.0, 1, 1, 1])
    affine[:3, 3] = -0.25
    grid = Grid((22, 18, 14), affine)
    mask = result.on_grid(mesh, grid)
    index = np.argwhere(np.ones(grid.shape, bool))
    world = grid.to_world(index.astype(float))
    outside = ((world < 0) | (world > SIZE)).any(axis=1)
    flat = mask.labels.ravel()
    assert (flat[outside] == 0).all()
    far = ~outside & (np.linalg.norm(world - 2, axis=1) > 3 + 2 * np.sqrt(3) + 0.01)  # than any such tet
    assert (flat[far] == 1).all()
    assert (flat[np.linalg.norm(world - 2, axis=1) < 1.5] == 0).all()
    points = result.of_points(mesh)
    for n in (0, 50, 200, len(points) - 1):
        assert points[n] == result.tets[(mesh.tets == n).any(axis=1)].all()
