"""What stands where on the pictures, and points through the map."""

from __future__ import annotations

import io

import numpy as np
import pytest
from PIL import Image
from report_scene import lattice, make_inputs, move

from volmap.report import bodies, cuts, gallery, scales, views
from volmap.report.pictures import drawable, finish, new_figure, write
from volmap.report.through import Passage
from volmap.types import Grid, LabelVolume, TetMesh, VolumeMap

EDGE = {"L": (-1, 0, 0), "R": (1, 0, 0), "P": (0, -1, 0), "A": (0, 1, 0), "I": (0, 0, -1), "S": (0, 0, 1)}


@pytest.mark.parametrize("view", views.STRAIGHT, ids=lambda v: v.words)
def test_letters_stand_where_the_body_is(view: views.View) -> None:
    """Truth: a small cube shifted toward L, R, A, P, S or I is painted at the side with that letter."""
    cube, tets = lattice(1)
    hull = bodies.hull_faces(tets)
    left, right, top, bottom = view.letters
    for letter, (row, column) in {left: (0, -1), right: (0, 1), top: (-1, 0), bottom: (1, 0)}.items():
        points = cube + 20.0 * np.array(EDGE[letter])
        blue = np.tile([0.0, 0.0, 1.0], (len(hull.tet), 1))
        sheet = bodies.Sheet(points, hull.triangles, blue, np.zeros(len(hull.tet), np.int64))
        rgb = bodies.paint([sheet], view, np.zeros(3), mm_per_px=1.0, height=60, width=60)
        rows, columns = np.nonzero(rgb[..., 0] < 0.3)
        assert rows.mean() + 0.5 - 30 == pytest.approx(20 * row, abs=0.6)
        assert columns.mean() + 0.5 - 30 == pytest.approx(20 * column, abs=0.6)


def test_views_are_rotations_and_the_body_s_left_is_on_the_right() -> None:
    for view in (*views.STRAIGHT, views.tilted(views.FRONT, 30, 20), views.tilted(views.BELOW, 20, -10)):
        np.testing.assert_allclose(view.axes @ view.axes.T, np.eye(3), atol=1e-12)
        assert np.linalg.det(view.axes) == pytest.approx(1.0)
    assert views.FRONT.letters == ("R", "L", "S", "I")
    assert views.BELOW.letters == ("R", "L", "A", "P")
    np.testing.assert_allclose(views.tilted(views.FRONT, 90, 0).toward, EDGE["L"], atol=1e-12)
    np.testing.assert_allclose(views.tilted(views.FRONT, 0, 90).toward, EDGE["S"], atol=1e-12)


def test_a_cut_face_shows_the_scale_s_own_colour() -> None:
    """Truth: no shading on a cut face; the pixel in its middle is the colour of the tet there."""
    cube, tets = lattice(2)
    labels = np.ones(len(tets), np.int64)
    colours = np.tile(scales.ratio_colours(0.6), (len(tets), 1))
    sheets = bodies.opened(cube, tets, labels, cube @ [0, 1.0, 0] - 0.2, colours)
    rgb = bodies.paint(sheets, views.FRONT, np.zeros(3), mm_per_px=0.1, height=40, width=40)
    np.testing.assert_allclose(rgb[20, 20], scales.ratio_colours(0.6), atol=1e-6)


def test_the_nearer_side_is_seen() -> None:
    """Truth: the front half red, the back half blue: from the front red, through a half-open cut blue."""
    cube, tets = lattice(2)
    front = cube[tets].mean(axis=1)[:, 1] > 0
    colours = np.where(front[:, None], [1.0, 0, 0], [0, 0, 1.0])
    hull = bodies.hull_faces(tets)
    sheet = bodies.Sheet(cube, hull.triangles, colours[hull.tet], np.zeros(len(hull.tet), np.int64))
    whole = bodies.paint([sheet], views.FRONT, np.zeros(3), mm_per_px=0.1, height=40, width=40)
    half = bodies.opened(cube, tets, front.astype(np.int64), cube[:, 1] + 0.5, colours)
    cut = bodies.paint(half, views.FRONT, np.zeros(3), mm_per_px=0.1, height=40, width=40)
    assert whole[20, 20].argmax() == 0
    assert cut[20, 20].argmax() == 2


def test_label_tints_and_outlines_meet_at_the_same_pixels() -> None:
    """Truth: a box of voxels and the same box as a mesh: the outline runs along the border of the tint."""
    labels = np.zeros((20, 20, 20), np.uint16)
    labels[5:15, 5:15, 5:15] = 1
    volume = LabelVolume(Grid((20, 20, 20), np.eye(4)), labels)
    cube, tets = lattice(3)
    mesh = TetMesh(5.0 * cube + 9.5, tets, np.ones(len(tets), np.int64))
    centre = np.full(3, 9.8)
    plane = cuts.Plane(views.LEFT, centre, 0.25, 80, 80)
    ground = cuts.label_ground(volume, plane, {1: "#004488"})
    found = cuts.outlines(mesh.interfaces, plane, {1: "#004488"}, dashed=False)
    tinted = np.abs(ground - 0.955).max(axis=2) > 0.01
    rows, columns = np.nonzero(tinted)
    box = np.concatenate([line.xy for line in found])
    assert len(found) == 1
    np.testing.assert_allclose(box.min(axis=0), [columns.min(), rows.min()], atol=1.0)
    np.testing.assert_allclose(box.max(axis=0), [columns.max() + 1, rows.max() + 1], atol=1.0)


def test_pixels_of_a_plane_know_their_voxels() -> None:
    """Truth: pixel to world by the view's axes, world to voxel by the inverse affine, one by one."""
    affine = np.array([[-1.1, 0.2, 0, 5], [0.1, 0.3, 2.0, -4], [0.2, 1.4, 0.3, 3], [0, 0, 0, 1.0]])
    grid = Grid((9, 8, 7), affine)
    plane = cuts.Plane(views.BELOW, np.array([1.0, 2.0, 3.0]), 0.7, 6, 8)
    index = plane.indices(grid)
    for row, column in np.ndindex(6, 8):
        world = grid.to_world(index[:, row, column][None])
        assert (world - plane.centre) @ views.BELOW.toward == pytest.approx(0, abs=1e-9)
        np.testing.assert_allclose(plane.pixels(world)[0], [column + 0.5, row + 0.5], atol=1e-9)


def test_points_go_through_an_affine_map_exactly_also_beside_the_mesh() -> None:
    """Truth: closed form; the extension of an affine map is itself."""
    cube, tets = lattice(3)
    matrix = np.array([[1.2, 0.3, 0.0], [-0.1, 0.9, 0.2], [0.0, 0.1, 1.4]])
    mesh = TetMesh(cube, tets, np.ones(len(tets), np.int64))
    there = VolumeMap(mesh, cube @ matrix.T + [5.0, 6.0, 7.0])
    points = np.random.default_rng(2).uniform(-1.4, 1.4, (50, 3))
    assert (np.abs(points).max(axis=1) > 1).any()
    carried = Passage(there).carry(points)
    np.testing.assert_allclose(carried, points @ matrix.T + [5.0, 6.0, 7.0], atol=1e-12)
    np.testing.assert_allclose(Passage(there.reversed()).carry(carried), points, atol=1e-12)
    assert Passage(there).carry(np.zeros((0, 3))).shape == (0, 3)


def test_both_bodies_are_shown_at_one_material_point() -> None:
    """Truth: the middle of B is the map of the middle of A, to what a tet's linear map loses."""
    scene = gallery.Scene(make_inputs(6))
    a, b = scene.middle
    np.testing.assert_allclose(move(a[None])[0], b, atol=0.4)


def test_round_lengths() -> None:
    assert [views.round_length(v) for v in (0.7, 1.0, 4.99, 5.0, 34.0)] == [0.5, 1.0, 2.0, 5.0, 20.0]


def test_names_that_the_font_cannot_draw_are_replaced() -> None:
    assert drawable("Körper", "label 1") == "Körper"
    assert drawable("器官", "label 1") == "label 1"
    assert drawable("a\nb", "label 1") == "label 1"
    assert drawable("", "label 1") == "label 1"


def test_pictures_are_whole_deterministic_and_know_no_mathematics() -> None:
    def make() -> bytes:
        figure = new_figure(2.0, 1.0)
        write(figure, 0.1, 0.4, "$x^2 costs $")
        return finish(figure, alt="a", caption="c").png

    assert make() == make()
    assert b"Software" not in make()
    assert np.asarray(Image.open(io.BytesIO(make()))).std() > 1
