"""What mended boundaries do inside: harmonic fields in closed form, the divergence theorem, one known map."""

import numpy as np
import pytest
from bodies import cubes

from volmap import measure
from volmap.measure.inner_residual import harmonic_divergence
from volmap.types import Grid, LabelVolume, Surface, TetMesh, VolumeMap

SIZE = np.array([12.0, 10.0, 8.0])


def shaken(label_of=lambda c: np.ones(len(c), int), seed=0):
    """A block whose inner points are shaken, so that no symmetry of its cubes helps."""
    mesh = cubes((6, 5, 4), SIZE, label_of=label_of)
    inner = ((mesh.points > 0) & (mesh.points < SIZE)).all(axis=1)
    points = mesh.points.copy()
    points[inner] += np.random.default_rng(seed).uniform(-0.2, 0.2, (int(inner.sum()), 3))
    return TetMesh(points, mesh.tets, mesh.labels)


def outer(mesh):
    return np.unique(mesh.interfaces.triangles[mesh.interfaces.sides[:, 1] == 0])


def test_linear_boundary_values_have_a_linear_harmonic_displacement():
    # closed form: linear functions are harmonic, and linear elements hold them exactly
    mesh = shaken()
    slope = np.array([[0.1, 0.02, 0], [0.3, -0.05, 0.1], [0, 0.2, 0.07]])
    points = outer(mesh)
    found = harmonic_divergence(mesh, points, mesh.points[points] @ slope.T + 1.0)
    assert found == pytest.approx(np.trace(slope), abs=1e-6)


def test_divergence_theorem_for_any_boundary_values():
    # law: the integral of div w is the flow of w through the boundary, for piecewise linear w exactly
    mesh = shaken()
    points = outer(mesh)
    moves = np.random.default_rng(1).normal(size=(len(points), 3))
    found = harmonic_divergence(mesh, points, moves)
    whole = np.zeros_like(mesh.points)
    whole[points] = moves
    triangles = mesh.interfaces.triangles
    corners = mesh.points[triangles]
    normals = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]) / 2
    flow = np.einsum("td,td->", normals, whole[triangles].mean(axis=1))
    assert (found * mesh.volumes).sum() == pytest.approx(flow, rel=1e-9)


def test_a_region_that_is_a_label_is_mended_by_the_labels_own_difference():
    # law, end to end: a block of label 2 inside label 1; the scan's inner block is 0.2 mm larger all round.
    # Drawn as voxels that are exactly the block, the region's other volume changes as the label's does.
    def inside(points, margin=0.0):
        return (np.abs(points - [6.0, 4.0, 4.0]) < np.array([2.0, 2.0, 2.0]) + margin).all(axis=1)

    mesh = cubes((6, 5, 4), SIZE, label_of=lambda c: np.where(inside(c), 2, 1))
    volume_map = VolumeMap(mesh, mesh.points @ np.diag([1.5, 1.0, 1.0]))
    image = volume_map.image_mesh
    moved = image.points.copy()
    block = inside(mesh.points, 1e-6)
    assert block.sum() == 27
    moved[block] += 0.2 * np.sign(np.round(mesh.points[block] - [6.0, 4.0, 4.0]))
    scan = Surface(moved, image.interfaces.triangles, image.interfaces.sides)
    residuals = {
        label: measure.boundary_residual(image.interfaces.of_label(label), scan.of_label(label))
        for label in (1, 2)
    }
    gain = measure.mending_divergence(image, residuals)
    labels = np.ones((2, 2, 2), np.uint16)
    affine = np.diag([2.0, 2, 2, 1])
    affine[:3, 3] = (5.0, 3.0, 3.0)
    drawn = LabelVolume(Grid((2, 2, 2), affine), labels)
    (region,) = measure.drawn_regions(volume_map, drawn, side="source")
    assert region.source_mm3.sum() == pytest.approx(64.0)
    none = np.zeros(len(mesh.tets))
    found = measure.mended_mm3(volume_map, region, none, gain)
    own = measure.volume_uncertainty(residuals[2], voxel_mm=1.0).difference_mm3
    truth = 6.4 * 4.4 * 4.4 - 6 * 4 * 4
    # first order: 0.2 mm times the area of 128 mm2; edges and corners of the shell are missing
    assert own == pytest.approx(0.2 * 128, rel=1e-9)
    assert own < truth < 1.1 * own
    # points that are held to their faces' planes by a hundredth of their pull give up to 3 % away
    assert found == pytest.approx(own, rel=0.03)
    # drawn where the map leads instead, its volume in SOURCE changes by as much, in SOURCE's measure
    affine_there = np.diag([1.5, 1, 1, 1]) @ affine
    (back,) = measure.drawn_regions(
        volume_map, LabelVolume(Grid((2, 2, 2), affine_there), labels), side="target"
    )
    assert measure.mended_mm3(volume_map, back, none, gain) == pytest.approx(found / 1.5, rel=1e-5)


def test_no_residual_and_a_folded_mesh_say_nothing():
    mesh = shaken()
    assert measure.mending_divergence(mesh, {}) is None
    own = mesh.interfaces.of_label(1)
    residual = {1: measure.boundary_residual(own, own)}
    assert measure.mending_divergence(mesh, residual) == pytest.approx(0.0, abs=1e-12)
    points = mesh.points.copy()
    points[int(np.flatnonzero(((points > 3) & (points < 5)).all(axis=1))[0])] += [0, 0, 6.0]
    assert measure.mending_divergence(mesh.moved(points), residual) is None
