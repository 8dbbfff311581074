"""Smoothed label indicators against a slow twin, a general spline library and closed forms."""

from itertools import pairwise

import numpy as np
from scipy.interpolate import BSpline

from volmap.kernels import labelfield, tie
from volmap.kernels.compiled import kernel
from volmap.kernels.labelfield import (
    LabelField,
    cut_edges,
    new_scratch,
    owners,
    voxel_changes,
)
from volmap.kernels.tie import TIED

evaluate, project = kernel(labelfield.evaluate.py_func), kernel(tie.project.py_func)

CUBIC = BSpline.basis_element([-2, -1, 0, 1, 2], extrapolate=False)


def field_of(labels, spacing=(1.0, 1.0, 1.0), width=1.5, n_labels=4):
    return LabelField(
        np.ascontiguousarray(labels, np.uint16), np.array(spacing), np.full(3, width), np.zeros(n_labels)
    )


def random_field():
    labels = np.random.default_rng(3).integers(0, 4, (7, 8, 9))
    return field_of(labels, spacing=(0.7, 1.0, 1.3))


def slow_values(field, point):
    """The definition, with the cubic spline of scipy: all voxels of a padded grid, one after another."""
    total = np.zeros(len(field.offsets))
    for index in np.ndindex(*(n + 14 for n in field.labels.shape)):
        voxel = np.array(index) - 7
        t = (point / field.spacing - voxel) / field.width
        if np.abs(t).max() < 2:
            inside = ((voxel >= 0) & (voxel < field.labels.shape)).all()
            label = int(field.labels[tuple(voxel)]) if inside else 0
            total[label] += np.prod(CUBIC(t) / field.width)
    return total + field.offsets


def fast_values(field, point):
    scratch = new_scratch()
    count = evaluate(field, *point, scratch)
    total = field.offsets.copy()
    total[scratch.names[:count]] = scratch.values[:count, 0]
    return total


def test_values_agree_with_the_definition():
    field = random_field()
    field.offsets[:] = [0.0, 0.1, -0.2, 0.05]
    for point in ([2.1, 3.3, 4.7], [0.0, 0.0, 0.0], [-1.0, 7.9, 11.0]):
        assert np.allclose(
            fast_values(field, np.array(point)), slow_values(field, np.array(point)), atol=1e-12
        )


def test_gradients_agree_with_central_differences():
    field, scratch, step = random_field(), new_scratch(), 1e-5
    point = np.array([2.1, 3.3, 4.7])
    for axis in range(3):
        shift = step * np.eye(3)[axis]
        wanted = (fast_values(field, point + shift) - fast_values(field, point - shift)) / (2 * step)
        count = evaluate(field, *point, scratch)
        found = np.zeros(4)
        found[scratch.names[:count]] = scratch.values[:count, 1 + axis]
        assert np.allclose(found, wanted, atol=1e-8)


def test_unit_width_is_a_partition_of_unity():
    # B-splines on their own knots sum to one (Schoenberg 1946)
    field = field_of(np.random.default_rng(1).integers(0, 4, (6, 6, 6)), width=1.0)
    for point in np.random.default_rng(2).uniform(-2, 8, (20, 3)):
        assert abs(fast_values(field, point).sum() - 1.0) < 1e-12


def test_owner_is_the_largest_value():
    field = random_field()
    points = np.random.default_rng(4).uniform(0, 7, (12, 3))
    wanted = [int(np.argmax(slow_values(field, p))) for p in points]
    assert owners(field, points, new_scratch()).tolist() == wanted


def half_space(width=1.5):
    """Label 1 below x = 5.5, label 2 above: by symmetry the tie is the plane halfway between the voxels."""
    labels = np.ones((12, 12, 12))
    labels[6:] = 2
    return field_of(labels, width=width)


def test_edges_are_cut_at_the_plane():
    field = half_space()
    points = np.array([[4.0, 5.0, 5.0], [8.0, 6.5, 5.5], [4.5, 5.0, 5.0]])
    sets = np.array([[1, -1], [2, -1], [1, -1]])
    edges = np.array([[0, 1], [1, 0], [0, 2]])
    where, labels = cut_edges(field, points, sets, edges, new_scratch())
    assert np.allclose(where, [1.5 / 4.0, 2.5 / 4.0, 1.0], atol=1e-4)
    assert labels[:, 1].tolist() == [2, 1, -1]
    assert labels[:2, 0].tolist() == [1, 2]


def test_projection_lands_on_the_plane_by_the_shortest_way():
    field, scratch = half_space(), new_scratch()
    ties, normals = np.array([[1, 2, -1]]), np.zeros((1, 3))
    place = np.array([4.7, 5.2, 6.1])
    assert project(field, place, ties, normals, 0, 3.0, scratch)
    assert abs(place[0] - 5.5) < 2 * TIED
    assert np.allclose(place[1:], [5.2, 6.1], atol=0.03)  # width 1.5 sums to one within 1 % only


def test_projection_searches_along_the_normal_where_the_field_is_flat():
    field, scratch = half_space(width=0.8), new_scratch()
    ties, normals = np.array([[1, 2, -1]]), np.array([[1.0, 0.0, 0.0]])
    place = np.array([2.2, 5.0, 5.0])  # farther than two widths: no slope here
    assert project(field, place, ties, normals, 0, 5.0, scratch)
    assert abs(place[0] - 5.5) < 1e-3
    place = np.array([2.2, 5.0, 5.0])
    assert not project(field, place, ties, normals, 0, 2.0, scratch)
    assert place.tolist() == [2.2, 5.0, 5.0]


def test_projection_finds_the_line_and_the_point_where_more_labels_tie():
    labels = np.zeros((12, 12, 12))
    labels[6:] = 1
    labels[:, 6:] = 2
    labels[6:, 6:] = 3
    labels[:, :, 6:] = 0  # four quarters below, one label above
    field, scratch = field_of(labels), new_scratch()
    ties, normals = np.array([[1, 2, 3, 0]]), np.zeros((1, 3))
    place = np.array([5.0, 5.9, 5.8])
    assert project(field, place, ties, normals, 0, 4.0, scratch)
    values = slow_values(field, place)
    assert np.ptp(values) < 4 * TIED


def test_voxel_changes_along_edges_are_those_of_a_slow_walk():
    field, rng = random_field(), np.random.default_rng(8)
    points = rng.uniform(-1.0, 9.0, (40, 3))  # some outside the array, where the label is 0
    edges, owner = rng.integers(0, 40, (100, 2)), rng.integers(0, 4, 40)
    found = voxel_changes(field, points, owner, edges, np.int64(11))
    for (a, b), changes in zip(edges, found, strict=True):
        run = [owner[a]]
        for place in np.linspace(points[a], points[b], 13)[1:-1]:
            voxel = np.rint(place / field.spacing).astype(int)
            inside = ((voxel >= 0) & (voxel < field.labels.shape)).all()
            run.append(field.labels[tuple(voxel)] if inside else 0)
        run.append(owner[b])
        assert changes == sum(one != other for one, other in pairwise(run))
