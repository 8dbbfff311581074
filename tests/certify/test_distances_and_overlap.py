"""Closed forms for surface distances and Dice coefficients."""

import numpy as np
import pytest

from volmap.certify.boundary_distance import surface_distances
from volmap.certify.overlap import common_voxels, dice, equivalent_shell_mm, shell_dice
from volmap.kernels.statistics import even_summary, summary, weighted_mean, weighted_quantile
from volmap.types import Surface

GOLDEN = (1 + 5**0.5) / 2


def icosphere(level, radius=1.0):
    """Points and outward triangles of a subdivided icosahedron."""
    points = [(-1, GOLDEN, 0), (1, GOLDEN, 0), (-1, -GOLDEN, 0), (1, -GOLDEN, 0)]
    points += [(0, -1, GOLDEN), (0, 1, GOLDEN), (0, -1, -GOLDEN), (0, 1, -GOLDEN)]
    points += [(GOLDEN, 0, -1), (GOLDEN, 0, 1), (-GOLDEN, 0, -1), (-GOLDEN, 0, 1)]
    rows = "0b5 051 017 07a 0ab 159 5b4 ba2 a76 718 394 342 326 368 389 495 24b 62a 867 981"
    triangles = np.array([[int(c, 16) for c in row] for row in rows.split()])
    points = np.array(points, float)
    for _ in range(level):
        edges, inverse = np.unique(
            np.sort(triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1), axis=0, return_inverse=True
        )
        middle = inverse.reshape(-1, 3) + len(points)
        points = np.concatenate([points, points[edges].mean(axis=1)])
        points /= np.linalg.norm(points, axis=1, keepdims=True)
        (a, b, c), (ab, bc, ca) = triangles.T, middle.T
        corners = np.concatenate([[a, ab, ca], [b, bc, ab], [c, ca, bc], [ab, bc, ca]])
        triangles = corners.reshape(4, 3, -1).transpose(0, 2, 1).reshape(-1, 3)
    points *= radius / np.linalg.norm(points, axis=1, keepdims=True)
    return Surface(points, triangles, np.tile([1, 0], (len(triangles), 1)))


def shifted(surface, by):
    return Surface(surface.points + np.array(by), surface.triangles, surface.sides)


@pytest.mark.parametrize(("level", "volume"), [(0, 2.536151), (2, 4.047045), (4, 4.179739)])
def test_the_icosphere_itself(level, volume):
    """Volumes of inscribed icospheres (recomputed values)."""
    s = icosphere(level)
    p = s.points[s.triangles]
    assert np.einsum("ij,ij->i", p[:, 0], np.cross(p[:, 1], p[:, 2])).sum() / 6 == pytest.approx(
        volume, abs=1e-6
    )


@pytest.mark.parametrize("d", [1.0, 4.0, 8.0])
def test_a_shifted_sphere(d):
    """Shifted by d <= r: mean d/2, median d/2, 95th percentile .95 d, largest d (recomputed).

    On a sphere the cosine to the shift is spread evenly, and the other sphere is |(c d + ...)| away,
    to first order d |c|; the exact distance is |sqrt(r^2 - 2 r d c + d^2) - r| with the same largest d.
    """
    r = 10.0
    cosine = (np.arange(20000) + 0.5) / 10000 - 1
    exact = np.abs(np.sqrt(r * r - 2 * r * d * cosine + d * d) - r)
    found = surface_distances(icosphere(4, r), shifted(icosphere(4, r), [0, 0, d])).summary
    assert found["mean"] == pytest.approx(exact.mean(), abs=0.02)
    assert found["p95"] == pytest.approx(np.quantile(exact, 0.95), abs=0.03)
    assert found["max"] == pytest.approx(d, abs=0.02)


@pytest.mark.parametrize("d", [0.5, 1.0])
def test_a_slightly_shifted_sphere_has_the_published_form(d):
    """The forms mean d/2, 95th percentile .95 d, max d hold for d much smaller than r (recomputed)."""
    r = 50.0
    found = surface_distances(icosphere(4, r), shifted(icosphere(4, r), [d, 0, 0])).summary
    assert found["mean"] == pytest.approx(d / 2, abs=0.06)
    assert found["p95"] == pytest.approx(0.95 * d, abs=0.06)
    assert found["max"] == pytest.approx(d, abs=0.06)


def test_a_refined_patch_does_not_weigh_more():
    """Two facing unit squares at distances 1 and 3: the mean is 2 however finely one of them is cut."""

    def square(n, x0, z):
        index = np.arange((n + 1) ** 2).reshape(n + 1, n + 1)
        x, y = np.meshgrid(np.linspace(x0, x0 + 1, n + 1), np.linspace(0, 1, n + 1), indexing="ij")
        a, b, c, d = (q.ravel() for q in (index[:-1, :-1], index[1:, :-1], index[1:, 1:], index[:-1, 1:]))
        return np.stack([x.ravel(), y.ravel(), np.full(x.size, z)], 1), np.r_[np.c_[a, b, c], np.c_[a, c, d]]

    (p, s), (q, t) = square(1, 0.0, 1.0), square(9, 5.0, 3.0)
    both = np.r_[s, t + len(p)]
    upper = Surface(np.r_[p, q], both, np.tile([1, 0], (len(both), 1)))
    flat, lower = square(1, -20.0, 0.0)
    wide = Surface(flat * [40, 40, 1] + [780, -20, 0], lower, np.tile([1, 0], (len(lower), 1)))
    found = surface_distances(upper, wide).summary
    assert found["mean"] == pytest.approx(2.0)
    assert found["max"] == pytest.approx(3.0)


def test_a_surface_without_triangles_has_no_distance():
    s = icosphere(0)
    empty = Surface(s.points, np.empty((0, 3), np.int64), np.empty((0, 2), np.int64))
    with pytest.raises(ValueError, match="no distance"):
        surface_distances(s, empty)


@pytest.mark.parametrize(("d", "expected"), [(0.5, 0.632813), (1.0, 0.3125), (0.0, 1.0), (2.5, 0.0)])
def test_dice_of_two_unit_spheres(d, expected):
    """Centres d apart: (1 - d/2)^2 (1 + d/4) (recomputed), here on voxels of 1/40 of the radius."""
    n = 40
    x = (np.arange(-n, int(n * (1 + d)) + 1) + 0.37) / n
    y = (np.arange(-n, n + 1) + 0.21) / n
    x, y, z = np.meshgrid(x, y, y, indexing="ij")
    first = 7 * (x**2 + y**2 + z**2 <= 1)
    second = 7 * ((x - d) ** 2 + y**2 + z**2 <= 1)
    common = common_voxels(first.astype(np.uint16), second.astype(np.uint16), [7])
    assert dice(common, 1) == pytest.approx(expected, abs=2e-3)


def test_common_voxels_are_those_of_masks():
    """Slow twin: a mask a pair; a label that is not asked for counts as outside."""
    first, second = np.random.default_rng(0).integers(0, 5, (2, 6, 7, 8)).astype(np.uint16)
    common = common_voxels(first, second, [1, 2, 4])
    for i, a in enumerate(([0, 3], [1], [2], [4])):
        for j, b in enumerate(([0, 3], [1], [2], [4])):
            assert common[i, j] == (np.isin(first, a) & np.isin(second, b)).sum()


def test_dice_of_nothing_is_undefined():
    nothing, something = np.zeros((1, 2, 2), np.uint16), np.ones((1, 2, 2), np.uint16)
    assert dice(common_voxels(nothing, something, [1]), 1) == 0
    with pytest.raises(ValueError, match="undefined"):
        dice(common_voxels(nothing, nothing, [1]), 1)


@pytest.mark.parametrize(("radius", "expected"), [(5, 0.733), (10, 0.858), (20, 0.927), (50, 0.970)])
def test_dice_of_a_shell(radius, expected):
    """A uniform shell of 1 mm (recomputed values), and the way back."""
    volume = 4 / 3 * np.pi * radius**3
    assert shell_dice(volume, 1.0) == pytest.approx(expected, abs=5e-4)
    assert equivalent_shell_mm(volume, shell_dice(volume, 1.0)) == pytest.approx(1.0)
    assert equivalent_shell_mm(volume, 1.0) == 0
    assert np.isnan(equivalent_shell_mm(volume, 0.0))


def test_weighted_statistics():
    values, weights = np.array([3.0, 1.0, 2.0]), np.array([1.0, 8.0, 1.0])
    assert weighted_mean(values, weights) == pytest.approx(1.3)
    assert [weighted_quantile(values, weights, q) for q in (0.0, 0.5, 0.8, 0.81, 0.9, 0.95, 1.0)] == [
        1,
        1,
        1,
        2,
        2,
        3,
        3,
    ]
    assert summary(np.arange(1.0, 101), np.ones(100)) == {"mean": 50.5, "p50": 50, "p95": 95, "max": 100}


@pytest.mark.parametrize("n", [1, 2, 7, 19, 20, 21, 1000])
def test_even_weights_need_no_sorting(n):
    values = np.random.default_rng(n).normal(size=n)
    assert even_summary(values) == pytest.approx(summary(values, np.ones(n)))
