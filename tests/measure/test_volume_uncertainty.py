"""Boundary residuals and what they say of volumes: closed forms, and a Monte Carlo twin."""

import numpy as np
import pytest
from bodies import enclosed, sphere, surface

from volmap.measure import boundary_residual, volume_uncertainty

RADIUS_MM = 20.0


def uncertainty_of(of_map, of_scan):
    return volume_uncertainty(boundary_residual(of_map, of_scan), voxel_mm=1.0)


@pytest.mark.parametrize("off_mm", [0.4, 0.05, -0.05, -0.4])
def test_a_sphere_whose_boundary_is_off_by_d_is_off_by_about_area_times_d(off_mm):
    # closed form: (R + d)^3 - R^3 = 3 R^2 d (1 + d/R + ...), so area times d is right to d/R relative,
    # for a ball as for these polyhedra, whose faces move in parallel; the least part is for their rims
    small, large = sphere(RADIUS_MM, 4), sphere(RADIUS_MM + off_mm, 4)
    found = uncertainty_of(small, large)
    change = enclosed(large.points, large.triangles) - enclosed(small.points, small.triangles)
    ball = 4 / 3 * np.pi * ((RADIUS_MM + off_mm) ** 3 - RADIUS_MM**3)
    assert change == pytest.approx(ball, rel=0.01)
    slack = abs(off_mm) / RADIUS_MM + 0.002
    assert found.difference_mm3 == pytest.approx(change, rel=slack)
    # an error of one sign everywhere cancels nowhere: all three are the same but for which surface is asked
    assert found.standard_mm3 == pytest.approx(abs(change), rel=slack)
    assert found.bound_mm3 == pytest.approx(found.standard_mm3, rel=1e-9)


def test_errors_of_both_signs_cancel_but_not_in_the_bound():
    # closed form: a ball moved by s has v . n = s cos(angle): integral 0, of its size pi R^2 2 s, and over
    # each half plus and minus pi R^2 s
    moved = sphere(RADIUS_MM, 4)
    there = surface(moved.points + np.array([0.3, 0, 0]), moved.triangles)
    found = uncertainty_of(moved, there)
    half = np.pi * RADIUS_MM**2 * 0.3
    assert abs(found.difference_mm3) < 0.01 * half
    assert found.bound_mm3 == pytest.approx(2 * half, rel=0.01)
    assert 0.4 * half < found.standard_mm3 < np.sqrt(2) * 1.01 * half  # no patches of both halves exceed that


def test_a_part_of_the_scan_that_the_map_does_not_come_near_counts():
    # closed form: a cone of height h over a patch of area a holds a h / 3; asked from the map's side alone
    # nothing of it shows, for every place of the map's surface is also one of the scan's
    body = sphere(RADIUS_MM, 3)
    face, tip = body.triangles[0], len(body.points)
    points = np.concatenate([body.points, 1.5 * body.points[face].mean(axis=0, keepdims=True)])
    sides = [[face[k], face[(k + 1) % 3], tip] for k in range(3)]
    spike = surface(points, np.concatenate([body.triangles[1:], sides]))
    volume = enclosed(spike.points, spike.triangles) - enclosed(body.points, body.triangles)
    residual = boundary_residual(body, spike)
    assert abs((residual.to_scan.offset_mm * residual.to_scan.areas).sum()) < 0.2 * volume
    found = volume_uncertainty(residual, voxel_mm=1.0)
    assert found.bound_mm3 > 0.9 * volume
    assert found.standard_mm3 > 0.9 * volume


def test_the_bound_is_never_below_the_standard_nor_that_below_the_difference():
    rng = np.random.default_rng(2)
    for _ in range(10):
        body = sphere(RADIUS_MM, 2)
        points = body.points + rng.normal(0, 0.5, body.points.shape)
        found = uncertainty_of(body, surface(points, body.triangles))
        assert abs(found.difference_mm3) <= found.standard_mm3 * (1 + 1e-12)
        assert found.standard_mm3 <= found.bound_mm3 * (1 + 1e-12)


@pytest.mark.parametrize("length_mm", [2.5, 5.0])
def test_random_errors_twin(length_mm):
    # slow twin: 60 surfaces whose errors along the normal are Gaussian, sd 0.3 mm, alike over `length_mm`.
    # The volume's standard deviation is the root of the sum of a_i a_j C_ij (law of propagation); what is
    # derived from one surface alone must be of that size, for another surface that was never seen.
    body = sphere(12.0, 3)
    normals, area = body.points / 12.0, _areas_of_points(body)
    apart = ((body.points[:, None] - body.points[None]) ** 2).sum(axis=2)
    covariance = 0.3**2 * np.exp(-apart / (2 * length_mm**2))
    values, vectors = np.linalg.eigh(covariance)
    root = vectors * np.sqrt(np.maximum(values, 0))
    rng = np.random.default_rng(4)
    whole, changes, found = enclosed(body.points, body.triangles), [], []
    for _ in range(60):
        points = body.points + normals * (root @ rng.normal(size=len(root)))[:, None]
        changes.append(enclosed(points, body.triangles) - whole)
        found.append(uncertainty_of(body, surface(points, body.triangles)).standard_mm3)
    law = np.sqrt(area @ covariance @ area)
    assert np.std(changes) == pytest.approx(law, rel=0.3)  # 60 draws: 9 % standard error, three of them
    assert 1.0 < np.sqrt(np.mean(np.square(found))) / law < 1.5
    others = np.abs(np.roll(changes, 1))
    assert np.mean(others <= found) > 0.5  # 68 % if the estimate were exact


def _areas_of_points(body):
    corners = body.points[body.triangles]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    area = np.zeros(len(body.points))
    np.add.at(area, body.triangles.ravel(), np.repeat(np.linalg.norm(cross, axis=1) / 6, 3))
    return area


def test_a_label_without_surface_has_no_residual():
    body = sphere(RADIUS_MM, 1)
    assert boundary_residual(body, surface(body.points, np.zeros((0, 3), int))) is None
