"""Given boundaries in every format, written by others' libraries; each fault has its sentence."""

import meshio
import numpy as np
import pytest
import pyvista

from volmap.io.given_boundary import read_given_boundary, write_given_boundary
from volmap.io.vtk_xml import write_mesh
from volmap.types import GivenBoundary, InputError, TetMesh

POINTS = np.array([[0.0, 0, 0], [10, 0, 0], [0, 10, 0], [0, 0, 10], [5, 5, 5]])
TRIANGLES = np.array([[0, 2, 1], [0, 1, 3], [0, 3, 2], [1, 2, 3]])
IMAGES = 2.0 * POINTS + (1, -2, 3)
HOW = {"tolerance_mm": 0.25, "reach_mm": 1.5}


def in_meshio(path, *, cells=(("triangle", TRIANGLES),), arrays=None):
    arrays = {"image_mm": IMAGES} if arrays is None else arrays
    meshio.Mesh(POINTS, list(cells), point_data=arrays).write(path)
    return path


def in_pyvista(path, images=IMAGES, points=POINTS, triangles=TRIANGLES):
    data = pyvista.PolyData.from_regular_faces(points, triangles)
    if images is not None:
        data.point_data["image_mm"] = images
    data.save(path)
    return path


def vtu_of_triangles(path):
    cells = np.insert(TRIANGLES, 0, 3, axis=1).ravel()
    data = pyvista.UnstructuredGrid(cells, np.full(4, 5), POINTS)
    data.point_data["image_mm"] = IMAGES
    data.save(path)
    return path


def ply(path):
    return in_meshio(path, arrays={f"image_mm_{a}": IMAGES[:, i].copy() for i, a in enumerate("xyz")})


def vtu_of_tets(path):
    """The same tetrahedron, its fourth corner's side cut by an inner point: four tets around it."""
    tets = np.array([[0, 1, 2, 4], [0, 3, 1, 4], [0, 2, 3, 4], [1, 3, 2, 4]])
    write_mesh(path, TetMesh(POINTS, tets, np.ones(4, int)), point_data={"image_mm": IMAGES})
    return path


@pytest.mark.parametrize(
    ("name", "write"),
    [
        ("a.vtp", in_pyvista),
        ("a.vtk", in_meshio),
        ("d.vtk", in_pyvista),
        ("a.ply", ply),
        ("a.vtu", vtu_of_triangles),
        ("b.vtu", vtu_of_tets),
        ("c.VTP", lambda path: in_pyvista(path.with_suffix(".vtp")).rename(path)),
    ],
)
def test_every_format_gives_the_same_surface(tmp_path, name, write):
    """Independent writers; points that no triangle uses are left out."""
    given = read_given_boundary(write(tmp_path / name), **HOW)
    assert len(given.points) == 4
    corners = given.points[given.triangles]
    assert {tuple(sorted(map(tuple, c))) for c in corners} == {
        tuple(sorted(map(tuple, c))) for c in POINTS[TRIANGLES]
    }
    np.testing.assert_allclose(given.images, 2.0 * given.points + (1, -2, 3), atol=1e-5)
    assert (given.tolerance_mm, given.reach_mm, given.name) == (0.25, 1.5, name)


def test_what_is_written_is_read_back(tmp_path):
    rng = np.random.default_rng(0)
    given = GivenBoundary(rng.normal(size=(4, 3)), TRIANGLES, rng.normal(size=(4, 3)), 0.1, 0.7, "von ü")
    write_given_boundary(tmp_path / "g.vtp", given)
    again = read_given_boundary(tmp_path / "g.vtp")
    for name in ("points", "triangles", "images"):
        np.testing.assert_array_equal(getattr(again, name), getattr(given, name))
    assert (again.tolerance_mm, again.reach_mm) == (0.1, 0.7)
    turned = again.reversed()
    np.testing.assert_array_equal(turned.points, given.images)
    np.testing.assert_array_equal(turned.images, given.points)


def with_a_nan(path):
    images = IMAGES.copy()
    images[2, 1] = np.nan
    return in_pyvista(path, images)


@pytest.mark.parametrize(
    ("name", "write", "words"),
    [
        ("a.vtp", lambda p: in_pyvista(p, None), "holds no point array `image_mm`, found no point data"),
        ("a.ply", lambda p: in_meshio(p, arrays={"other": IMAGES[:, 0].copy()}), "`image_mm`, found other"),
        ("a.stl", lambda p: in_meshio(p, arrays={}), "holds no point array `image_mm`"),
        ("a.vtp", lambda p: in_pyvista(p, IMAGES[:, :2].copy()), "does not fit the points, found float64 of"),
        ("b.vtp", with_a_nan, "values of `image_mm` are not finite, found 1 of 4, the first at point 2"),
        ("b.vtk", lambda p: in_meshio(p, cells=[("line", TRIANGLES[:, :2])]), "holds no triangles"),
        ("c.vtk", lambda p: in_meshio(p, cells=[("quad", TRIANGLES[:, [0, 1, 2, 2]])]), "found quad"),
        ("c.vtp", lambda p: p.write_bytes(b"no file") and p, "is not a VTK XML file"),
        ("a.xyz", lambda p: p.write_text("1 2 3") and p, "expected .vtp .vtu .vtk .stl"),
        ("no.vtp", lambda p: p, "there is no such file"),
    ],
)
def test_each_fault_is_one_sentence(tmp_path, name, write, words):
    with pytest.raises(InputError) as caught:
        read_given_boundary(write(tmp_path / name), **HOW)
    assert words in caught.value.sentence
    assert caught.value.sentence.startswith(name)
    assert "\n" not in caught.value.sentence


def test_a_nan_where_no_triangle_is_does_not_matter(tmp_path):
    images = IMAGES.copy()
    images[4] = np.nan
    assert len(read_given_boundary(in_pyvista(tmp_path / "a.vtp", images), **HOW).images) == 4


def test_a_file_of_others_says_no_tolerance(tmp_path):
    with pytest.raises(InputError, match="does not say its tolerance_mm"):
        read_given_boundary(in_pyvista(tmp_path / "a.vtp"))
