"""The software z-buffer against closed forms and a slow twin."""

from __future__ import annotations

import numpy as np
import pytest

from volmap.kernels import zbuffer


def white(triangles: np.ndarray) -> np.ndarray:
    return np.ones((len(triangles), 3, 4))


def ball(subdivisions: int) -> tuple[np.ndarray, np.ndarray]:
    """An octahedron, its triangles halved again and again and pushed onto the unit sphere."""
    corners = [np.array(p, float) for p in np.concatenate([np.eye(3), -np.eye(3)])]
    triangles = [(a, b, c) for a in (0, 3) for b in (1, 4) for c in (2, 5)]
    for _ in range(subdivisions):
        middles: dict[tuple[int, int], int] = {}

        def middle(a: int, b: int, middles: dict[tuple[int, int], int] = middles) -> int:
            key = (min(a, b), max(a, b))
            if key not in middles:
                point = corners[a] + corners[b]
                corners.append(point / np.linalg.norm(point))
                middles[key] = len(corners) - 1
            return middles[key]

        finer = []
        for a, b, c in triangles:
            ab, bc, ca = middle(a, b), middle(b, c), middle(c, a)
            finer += [(a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca)]
        triangles = finer
    return np.array(corners), np.array(triangles)


@pytest.mark.parametrize("radius", [12.3, 24.6, 49.2])
def test_the_silhouette_of_a_sphere_has_the_area_of_a_circle(radius: float) -> None:
    """Truth: pi r^2, to a tenth of a pixel along the rim; so the relative error falls as 1/r."""
    points, triangles = ball(5)
    screen = points * radius + [60.2, 55.7, 0.0]
    _, depth, face = zbuffer.draw_triangles(screen, triangles, white(triangles), height=112, width=121)
    area = int((face >= 0).sum())
    assert abs(area - np.pi * radius**2) < 0.1 * 2 * np.pi * radius
    assert depth.min() == pytest.approx(-radius, abs=0.01 * radius)  # the near pole, not the far one


def test_pixels_on_shared_edges_and_corners_belong_to_exactly_one_triangle() -> None:
    """Truth: a triangulated square covers each pixel centre once, also where corners are pixel centres."""
    n = 6
    i, j = np.meshgrid(np.arange(n + 1), np.arange(n + 1), indexing="ij")
    screen = np.stack([2.0 * j + 0.5, 2.0 * i + 0.5, 0 * i], -1).reshape(-1, 3).astype(float)
    inner = (i > 0) & (i < n) & (j > 0) & (j < n)
    jitter = np.random.default_rng(1).choice([-0.5, 0.0, 0.5], (inner.sum(), 2))
    screen[inner.ravel(), :2] += jitter
    a = ((n + 1) * i + j)[:-1, :-1].ravel()
    triangles = np.concatenate([np.stack(t, 1) for t in ([a, a + 1, a + n + 2], [a, a + n + 2, a + n + 1])])
    triangles[::3] = triangles[::3, ::-1]  # turned round: no matter
    times = np.zeros((14, 14), int)
    for t in triangles:
        one = t[None]
        times += zbuffer.draw_triangles(screen, one, white(one), height=14, width=14)[2] >= 0
    assert (times[1:12, 1:12] == 1).all()
    assert times.max() == 1
    assert times.sum() == 144  # 12 x 12 mm of square, one pixel each: half of its rim is its own


def test_the_nearer_square_hides_the_other_in_either_order() -> None:
    square = np.array([[0, 0, 0], [8, 0, 0], [8, 8, 0], [0, 8, 0]], float)
    screen = np.concatenate([np.add(square, (1, 1, 5.0)), np.add(square, (5, 5, 2.0))])
    triangles = np.array([[0, 1, 2], [0, 2, 3], [4, 5, 6], [4, 6, 7]])
    colours = np.ones((4, 3, 4))
    colours[:2, :, :3], colours[2:, :, :3] = [0.9, 0.1, 0.2], [0.1, 0.8, 0.3]
    for order in ([0, 1, 2, 3], [3, 2, 1, 0]):
        rgba, depth, _ = zbuffer.draw_triangles(screen, triangles[order], colours[order], height=16, width=16)
        assert rgba[7, 7] == pytest.approx([0.1, 0.8, 0.3, 1])  # both are here; the second is nearer
        assert rgba[2, 2] == pytest.approx([0.9, 0.1, 0.2, 1])
        assert (depth[7, 7], depth[2, 2], depth[15, 15]) == (2.0, 5.0, np.inf)
        assert (rgba[15, 15] == 0).all()


def test_colours_between_corners_are_linear() -> None:
    """Truth: an affine function of the place is reproduced by linear interpolation."""
    screen = np.array([[1.0, 2.0, 3.0], [37.0, 5.0, 9.0], [9.0, 33.0, -4.0]])
    corner = 0.1 + 0.01 * screen[:, 0] + 0.02 * screen[:, 1]
    colours = np.repeat(corner[None, :, None], 4, axis=2)
    rgba, _, face = zbuffer.draw_triangles(screen, np.array([[0, 1, 2]]), colours, height=40, width=40)
    rows, columns = np.nonzero(face == 0)
    assert len(rows) > 400
    expected = 0.1 + 0.01 * (columns + 0.5) + 0.02 * (rows + 0.5)
    np.testing.assert_allclose(rgba[rows, columns, 0], expected, atol=1e-6)


def test_against_a_slow_twin() -> None:
    """Truth: every pixel centre tried against every triangle, barycentric coordinates by a linear solve."""
    rng = np.random.default_rng(4)
    screen = np.c_[rng.uniform(-5, 35, (60, 2)), rng.uniform(0, 10, 60)]
    triangles = rng.permutation(60).reshape(20, 3)
    _, depth, face = zbuffer.draw_triangles(screen, triangles, white(triangles), height=30, width=30)
    for row, column in np.ndindex(30, 30):
        nearest, which = np.inf, -1
        for t, corners in enumerate(screen[triangles]):
            lhs = np.vstack([corners[:, :2].T, np.ones(3)])
            w = np.linalg.solve(lhs, [column + 0.5, row + 0.5, 1.0])
            if (w >= 0).all() and w @ corners[:, 2] < nearest:
                nearest, which = w @ corners[:, 2], t
        assert face[row, column] == which
        if which >= 0:
            assert depth[row, column] == pytest.approx(nearest, abs=1e-9)


def test_shrinking_is_the_mean_over_blocks() -> None:
    image = np.arange(4 * 6 * 2, dtype=np.float32).reshape(4, 6, 2)
    small = zbuffer.shrink(image, 2)
    assert small.shape == (2, 3, 2)
    assert small[1, 2, 1] == image[2:4, 4:6, 1].mean()


def test_a_half_opaque_veil_gives_half_of_each() -> None:
    veil = np.zeros((2, 2, 4), np.float32)
    veil[..., 0], veil[..., 3] = 1.0, 0.5
    back = np.ones((2, 2, 4), np.float32) * [0, 1, 0, 1]
    back = back.astype(np.float32)
    zbuffer.lay_over(veil, back, np.array([[True, False], [False, False]]))
    assert back[0, 0].tolist() == [0.5, 0.5, 0.0, 1.0]
    assert back[1, 1].tolist() == [0.0, 1.0, 0.0, 1.0]


def test_lines_stand_at_jumps_and_borders_only() -> None:
    depth = np.full((1, 9), 1.0)
    depth[0, 3:] = 5.0  # a jump between columns 2 and 3: the nearer one is marked
    depth[0, 8] = np.inf
    group = np.array([[1, 1, 1, 1, 1, 2, 2, 2, -9]])  # a border between columns 4 and 5: both are marked
    assert np.flatnonzero(zbuffer.rims(group, depth, 2.0)[0]).tolist() == [2, 4, 5, 7]
