"""Meshes of shapes whose volume, topology and surface are known in closed form."""

import numpy as np
import pytest
from label_shapes import ball, centres, faces_of, two_in_one, volume_of

from volmap.kernels.tets import dihedral_degrees
from volmap.mesh import MeshSettings, mesh

LIMIT_PCT, THIN_LIMIT_PCT, LEAST_DEG = 0.5, 3.0, 12.0  # the requirement on this mesher


def require_sound(result):
    """What every mesh must be: positive, conforming, closed, without pinned tets or unused points."""
    tets, points, labels = result.mesh.tets, result.mesh.points, result.mesh.labels
    assert (result.mesh.volumes > 0).all()
    assert dihedral_degrees(points, tets).min() >= LEAST_DEG
    faces, place, counts = np.unique(faces_of(tets), axis=0, return_inverse=True, return_counts=True)
    assert counts.max() == 2
    assert len(np.unique(tets)) == len(points)
    hull = faces[counts == 1]
    edges = np.sort(hull[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    assert (np.unique(edges, axis=0, return_counts=True)[1] % 2 == 0).all()
    sides = np.repeat(labels, 4)
    lowest, highest = np.full(len(faces), 1 << 30), np.zeros(len(faces), np.int64)
    np.minimum.at(lowest, place.reshape(-1), sides)
    np.maximum.at(highest, place.reshape(-1), sides)
    held = np.zeros(len(points), bool)
    held[faces[(counts == 1) | (lowest != highest)]] = True
    assert not held[tets].all(axis=1).any()
    for row in result.quality.rows:
        assert abs(row.volume_error_pct) <= (THIN_LIMIT_PCT if row.thin else LIMIT_PCT)
        assert (row.pieces, row.euler) == (row.voxel_pieces, row.voxel_euler)


def test_sphere():
    result = mesh(ball(10.0), MeshSettings(edge_mm=2.0))
    require_sound(result)
    # closed form 4/3 pi r^3; the voxels themselves are 0.84 % off
    assert abs(result.mesh.volume_of(1) / (4 / 3 * np.pi * 1000) - 1) < 0.014
    surface = result.mesh.interfaces
    radius = np.linalg.norm(surface.points[np.unique(surface.triangles)], axis=1)
    assert np.abs(radius - 10.0).mean() < 0.2  # mm, of voxels of 1 mm: sub-voxel
    assert np.abs(radius - 10.0).max() < 0.7


def test_torus():
    x, y, z = centres((30, 30, 14))
    result = mesh(volume_of((np.hypot(x, y) - 9) ** 2 + z * z < 16), MeshSettings(edge_mm=1.8))
    require_sound(result)
    assert result.quality.row(1).euler == 0
    assert abs(result.mesh.volume_of(1) / (2 * np.pi**2 * 9 * 16) - 1) < 0.02  # 2 pi^2 R r^2


def test_ellipsoid_in_long_voxels():
    spacing, axes = (0.8, 0.8, 3.0), (9.0, 11.0, 15.0)
    x, y, z = centres((30, 34, 16), spacing)
    inside = (x / axes[0]) ** 2 + (y / axes[1]) ** 2 + (z / axes[2]) ** 2 < 1
    result = mesh(volume_of(inside, spacing), MeshSettings(edge_mm=2.2))
    require_sound(result)
    assert abs(result.mesh.volume_of(1) / (4 / 3 * np.pi * np.prod(axes)) - 1) < 0.02
    points = result.mesh.interfaces.points / axes
    hull = np.unique(result.mesh.interfaces.triangles)
    off = (np.linalg.norm(points[hull], axis=1) - 1) * min(axes)
    assert np.abs(off).mean() < 0.35  # mm; 0.12-0.22 was seen at these voxels, at finer edges


def test_nested_and_touching_labels_share_their_interfaces():
    result = mesh(two_in_one(), MeshSettings(edge_mm=1.7))
    require_sound(result)
    assert result.mesh.interfaces.pairs == ((1, 0), (2, 1), (3, 0), (3, 1))
    whole = sum(row.voxel_mm3 for row in result.quality.rows)
    assert abs(result.mesh.volumes.sum() / whole - 1) < 0.005


@pytest.mark.parametrize("edge_mm", [1.2, 2.5])
def test_wall_of_two_voxels_keeps_its_topology(edge_mm):
    x, y, z = centres((24, 24, 24))
    radius = np.sqrt(x * x + y * y + z * z)
    result = mesh(volume_of((radius < 9) & (radius >= 7)), MeshSettings(edge_mm=edge_mm))
    require_sound(result)
    assert result.quality.row(1).thin
    assert result.quality.row(1).euler == 2


def test_body_that_fills_its_grid():
    labels = np.ones((14, 14, 14))
    labels[7:] = 2
    result = mesh(volume_of(labels), MeshSettings(edge_mm=1.8))
    require_sound(result)
    assert (np.abs(result.mesh.points).max(axis=0) > 6.5).all()  # past the outermost voxel centres


def test_edge_length_is_what_was_asked():
    lengths = []
    for edge_mm in (1.5, 3.0):
        mesh_ = mesh(ball(9.0), MeshSettings(edge_mm=edge_mm)).mesh
        ends = mesh_.points[mesh_.tets[:, [[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]]]]
        lengths.append(np.linalg.norm(ends[:, :, 0] - ends[:, :, 1], axis=2).mean())
    assert np.allclose(lengths, [1.5, 3.0], rtol=0.1)


def test_default_edge_gives_the_wanted_number_of_tets():
    result = mesh(ball(12.0), MeshSettings(wanted_tets=6000))
    assert abs(result.quality.tets / 6000 - 1) < 0.25
