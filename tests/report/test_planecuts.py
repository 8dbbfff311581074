"""Cuts of tets and triangles against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from report_scene import lattice

from volmap.kernels import planecuts
from volmap.kernels.topology import face_corners, match_faces


def area(points: np.ndarray, triangles: np.ndarray) -> float:
    a, b, c = (points[triangles[:, k]] for k in range(3))
    return float(0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum())


@pytest.mark.parametrize(
    ("normal", "offset", "expected"),
    [
        ((1.0, 0.0, 0.0), 0.3, 1.0),
        ((1.0, 0.0, 0.0), 0.5, 1.0),  # through points of the lattice
        ((1.0, 1.0, 1.0), 1.5, 3 * np.sqrt(3) / 4),  # the regular hexagon of side 1 / sqrt 2
        ((1.0, 1.0, 0.0), 1.0, np.sqrt(2.0)),  # along edges of tets
    ],
)
def test_the_cut_of_a_cube_has_the_area_of_its_section(normal, offset, expected) -> None:  # type: ignore[no-untyped-def]
    """Truth: plane sections of the unit cube, elementary."""
    cube, tets = lattice(4)
    points = 0.5 * (cube + 1)
    cut = planecuts.cut_tets(points @ normal - offset, tets)
    at = cut.at(points)
    assert area(at, cut.cells) == pytest.approx(expected, rel=1e-12)
    np.testing.assert_allclose(at @ normal, offset, atol=1e-12)
    inside = at[cut.cells].mean(axis=1)
    assert (inside >= points[tets[cut.parent]].min(axis=1) - 1e-12).all()


def test_the_image_of_a_cut_is_the_cut_of_the_image() -> None:
    """Truth: affine maps keep planes and ratios."""
    cube, tets = lattice(3)
    matrix = np.array([[1.2, 0.3, 0.0], [-0.1, 0.9, 0.2], [0.0, 0.1, 1.4]])
    values = cube @ [0.3, 0.5, 0.8] - 0.11
    cut = planecuts.cut_tets(values, tets)
    np.testing.assert_allclose(cut.at(cube @ matrix.T), cut.at(cube) @ matrix.T, atol=1e-12)


def test_the_clipped_hull_and_its_cut_face_enclose_the_volume_that_is_left() -> None:
    """Truth: the divergence theorem; x < 0.3 of the unit cube has volume 0.3."""
    cube, tets = lattice(4)
    points = 0.5 * (cube + 1)
    hull = face_corners(tets, match_faces(tets)[2])
    kept = planecuts.clip_triangles(points[:, 0] - 0.3, hull)
    a, b, c = (kept.at(points)[kept.cells[:, k]] for k in range(3))
    flux = np.einsum("ij,ij->i", a, np.cross(b, c)).sum() / 6.0
    lid = 0.3 * 1.0 / 3.0
    assert flux + lid == pytest.approx(0.3, rel=1e-12)
    assert kept.at(points)[:, 0].max() == pytest.approx(0.3, abs=1e-12)


def test_outlines_are_closed_chains_of_the_right_length() -> None:
    """Truth: the section of a cube's hull is a square, side 1, met once."""
    cube, tets = lattice(4)
    points = 0.5 * (cube + 1)
    hull = face_corners(tets, match_faces(tets)[2])
    cut = planecuts.cut_triangles(points[:, 2] - 0.4, hull)
    found = planecuts.chains(cut.cells)
    assert len(found) == 1
    assert found[0][0] == found[0][-1]
    path = cut.at(points)[found[0]]
    assert np.linalg.norm(np.diff(path, axis=0), axis=1).sum() == pytest.approx(4.0, rel=1e-12)


def test_chains_use_every_segment_once_also_at_junctions() -> None:
    """Truth: a theta (two junctions of three) is three chains; a loose segment is one; a ring is closed."""
    theta = [(0, 1), (1, 2), (0, 3), (3, 2), (0, 2)]
    cells = np.array([*theta, (10, 11), (20, 21), (21, 22), (22, 20)])
    found = planecuts.chains(cells)
    pairs = sorted(tuple(sorted(p)) for c in found for p in zip(c[:-1].tolist(), c[1:].tolist(), strict=True))
    assert pairs == sorted(tuple(sorted(c)) for c in cells.tolist())
    assert len(found) == 5
    assert planecuts.chains(np.zeros((0, 2), np.int64)) == []
