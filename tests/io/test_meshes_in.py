"""Meshes and surfaces of other programs, with the data on them; VTK's writers and meshio are independent."""

import meshio
import numpy as np
import pytest
from sound_files import CUBE, SIDES, TETS
from vtkmodules.util.numpy_support import numpy_to_vtk, numpy_to_vtkIdTypeArray
from vtkmodules.vtkCommonCore import vtkPoints, vtkStringArray
from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData, vtkUnstructuredGrid
from vtkmodules.vtkIOLegacy import vtkPolyDataWriter, vtkUnstructuredGridWriter

from volmap.io.meshes import read_mesh_file
from volmap.io.surfaces import read_closed_surface
from volmap.io.vtk_xml import write_mesh, write_surface
from volmap.types import InputError, Surface, TetMesh

POINTS = 20 * CUBE + [1.5, -2.25, 3.125]
HEAT = np.linspace(-1, 1, 8)
FLOW = np.arange(24.0).reshape(8, 3) / 7
LABELS = np.array([1, 1, 2, 2, 3, 3])


def vtk_points():
    made = vtkPoints()
    made.SetData(numpy_to_vtk(np.ascontiguousarray(POINTS), deep=True))
    return made


def vtk_cells(corners):
    made = vtkCellArray()
    n, k = corners.shape
    offsets = numpy_to_vtkIdTypeArray(np.arange(0, n * k + 1, k, dtype=np.int64), deep=True)
    made.SetData(offsets, numpy_to_vtkIdTypeArray(np.ascontiguousarray(corners, np.int64).ravel(), deep=True))
    return made


def with_data(data, labels):
    for attributes, arrays in (
        (data.GetPointData(), {"heat": HEAT, "flow": FLOW}),
        (data.GetCellData(), {"label": labels}),
    ):
        for name, values in arrays.items():
            array = numpy_to_vtk(np.ascontiguousarray(values), deep=True)
            array.SetName(name)
            attributes.AddArray(array)
    words = vtkStringArray()
    words.SetName("note")
    words.InsertNextValue("two words")
    data.GetFieldData().AddArray(words)
    return data


def written(writer, data, file, *, binary, version):
    writer.SetFileName(str(file))
    writer.SetFileVersion(version)
    (writer.SetFileTypeToBinary if binary else writer.SetFileTypeToASCII)()
    writer.SetInputData(data)
    assert writer.Write()
    return file


@pytest.mark.parametrize("binary", [False, True])
@pytest.mark.parametrize("version", [42, 51])
def test_legacy_tets_with_their_data(tmp_path, binary, version):
    # Independent library: VTK's own writer of both versions of the format.
    grid = vtkUnstructuredGrid()
    grid.SetPoints(vtk_points())
    grid.SetCells(10, vtk_cells(TETS))
    data = with_data(grid, LABELS)
    file = written(vtkUnstructuredGridWriter(), data, tmp_path / "x.vtk", binary=binary, version=version)
    read = read_mesh_file(file)
    assert np.array_equal(read.body.points, POINTS)
    assert np.array_equal(read.body.tets, TETS)
    assert np.array_equal(read.body.labels, LABELS)
    assert np.allclose(read.point_data["heat"], HEAT, atol=0 if binary else 1e-8)
    assert np.allclose(read.point_data["flow"], FLOW, atol=0 if binary else 1e-6)
    assert read.cell_data == {}
    assert read.findings == ()


@pytest.mark.parametrize("binary", [False, True])
@pytest.mark.parametrize("version", [42, 51])
def test_legacy_surfaces(tmp_path, binary, version):
    # Closed form: the cube of edge 20 encloses 8000.
    data = vtkPolyData()
    data.SetPoints(vtk_points())
    data.SetPolys(vtk_cells(SIDES))
    with_data(data, np.arange(12))
    file = written(vtkPolyDataWriter(), data, tmp_path / "x.vtk", binary=binary, version=version)
    points, triangles = read_closed_surface(file)
    assert np.linalg.det(points[triangles]).sum() / 6 == pytest.approx(8000)
    read = read_mesh_file(file)
    assert isinstance(read.body, Surface)
    assert np.array_equal(read.cell_data["label"], np.arange(12))


def test_legacy_attributes_in_words(tmp_path):
    # Truth: the attribute keywords of "VTK file formats" (SCALARS, VECTORS, NORMALS, TENSORS, LOOKUP_TABLE).
    (tmp_path / "x.vtk").write_text(
        "# vtk DataFile Version 2.0\nTitel mit Umlaut: Körper\nASCII\nDATASET POLYDATA\n"
        "POINTS 3 float\n0 0 0 1 0 0\n0 1 nan\n"
        "POLYGONS 1 4\n3 0 1 2\nPOINT_DATA 3\nSCALARS heat float 1\nLOOKUP_TABLE default\n1 2 3\n"
        "LOOKUP_TABLE default 2\n0 0 0 1 1 1 1 1\nVECTORS flow double\n1 2 3 4 5 6 7 8 9\n"
        f"TENSORS strain float\n{' '.join(map(str, range(27)))}\nNORMALS n float\n{'0 0 1 ' * 3}\n"
    )
    from volmap.io.vtk_legacy import read_legacy

    kind, piece = read_legacy(tmp_path / "x.vtk")
    assert kind == "PolyData"
    assert piece.sections["PointData"]["heat"].tolist() == [1, 2, 3]
    assert piece.sections["PointData"]["flow"][1].tolist() == [4, 5, 6]
    assert piece.sections["PointData"]["strain"].shape == (3, 9)
    with pytest.raises(InputError, match="not finite"):
        read_mesh_file(tmp_path / "x.vtk")


@pytest.mark.parametrize("ending", [".vtu", ".vtk", ".msh", ".mesh"])
def test_tets_as_meshio_writes_them(tmp_path, ending):
    mesh = meshio.Mesh(POINTS, [("tetra", TETS)], point_data={"flow": FLOW})
    name = {".msh": "gmsh:physical", ".mesh": "medit:ref"}.get(ending, "label")
    mesh.cell_data[name] = [LABELS]
    if ending == ".msh":
        mesh.cell_data["gmsh:geometrical"] = [LABELS]
    how = {".msh": {"file_format": "gmsh22"}, ".vtu": {"binary": True}}.get(ending, {})
    mesh.write(tmp_path / f"x{ending}", **how)
    read = read_mesh_file(tmp_path / f"x{ending}")
    assert np.allclose(read.body.points, POINTS, atol=1e-12)
    assert np.array_equal(read.body.tets, TETS)
    assert np.array_equal(read.body.labels, LABELS)
    if ending != ".mesh":
        assert np.array_equal(read.point_data["flow"], FLOW)


def saved(path, cells, **data):
    meshio.Mesh(POINTS, cells, **data).write(path)
    return path


def test_our_own_files_come_back(tmp_path):
    write_mesh(tmp_path / "own.vtu", TetMesh(POINTS, TETS, LABELS), point_data={"flow": FLOW})
    read = read_mesh_file(tmp_path / "own.vtu")
    assert np.array_equal(read.body.labels, LABELS)
    assert np.array_equal(read.point_data["flow"], FLOW)
    sides = np.tile([2, 1], (12, 1))
    write_surface(tmp_path / "own.vtp", Surface(POINTS, SIDES, sides), cell_data={"area": np.ones(12)})
    read = read_mesh_file(tmp_path / "own.vtp")
    assert np.array_equal(read.body.sides, sides)
    assert list(read.cell_data) == ["area"]


LABEL_RULES = [  # (arrays, labels, code of the finding)
    ({"label": LABELS, "other": LABELS}, LABELS, None),
    ({"label": LABELS.astype(float)}, LABELS, None),
    ({"labels": LABELS, "other": LABELS}, LABELS, "labels-from"),
    ({"region": LABELS, "heat": LABELS / 3}, LABELS, "labels-from"),
    ({"heat": LABELS / 3}, np.ones(6), "one-label"),
    ({}, np.ones(6), "one-label"),
]


@pytest.mark.parametrize(("arrays", "labels", "code"), LABEL_RULES)
def test_which_array_gives_the_labels(tmp_path, arrays, labels, code):
    # Law: the rule that `read_mesh_file` states.
    cell_data = {name: [values] for name, values in arrays.items()}
    read = read_mesh_file(saved(tmp_path / "x.vtu", [("tetra", TETS)], cell_data=cell_data))
    assert np.array_equal(read.body.labels, labels)
    assert [f.code for f in read.findings] == ([code] if code else [])


@pytest.mark.parametrize(
    ("arrays", "words"),
    [
        ({"a": LABELS, "b": LABELS}, "several cell arrays could be the labels, found a, b"),
        ({"label": LABELS - 1}, "not from 1 to 65535, found 0 to 2"),
        ({"label": LABELS / 3}, "not one whole number a tet"),
    ],
)
def test_labels_that_cannot_be_told(tmp_path, arrays, words):
    cell_data = {name: [values] for name, values in arrays.items()}
    with pytest.raises(InputError, match=words):
        read_mesh_file(saved(tmp_path / "x.vtu", [("tetra", TETS)], cell_data=cell_data))


def test_other_cells_and_unused_points_are_left_out_with_their_data(tmp_path):
    cells = [("line", SIDES[:2, :2]), ("tetra", TETS[:1]), ("triangle", SIDES[:3])]
    cell_data = {
        "a": [np.array([7, 7]), np.array([5]), np.array([7, 7, 7])],
        "heat": [np.zeros(n) for n in (2, 1, 3)],
    }
    read = read_mesh_file(saved(tmp_path / "x.vtu", cells, cell_data=cell_data, point_data={"flow": FLOW}))
    used = np.unique(TETS[0])
    assert read.body.labels.tolist() == [5]
    assert np.array_equal(read.body.points, POINTS[used])
    assert np.array_equal(read.point_data["flow"], FLOW[used])
    assert len(read.cell_data["heat"]) == 1
    assert {f.code for f in read.findings} == {"cells-left-out", "points-left-out", "labels-from"}


@pytest.mark.parametrize("ending", [".stl", ".ply", ".off", ".obj"])
def test_a_surface_without_sides_is_label_one(tmp_path, ending):
    read = read_mesh_file(saved(tmp_path / f"x{ending}", [("triangle", SIDES)]))
    assert isinstance(read.body, Surface)
    assert len(read.body.points) == 8
    assert read.body.pairs == ((1, 0),)
    assert [f.code for f in read.findings] == ["one-label"]


def test_a_solid_of_one_label_gives_its_boundary(tmp_path):
    # Closed form: six tets of a cube of edge 20.
    points, triangles = read_closed_surface(saved(tmp_path / "x.vtu", [("tetra", TETS)]))
    assert np.linalg.det(points[triangles]).sum() / 6 == pytest.approx(8000)
    assert len(triangles) == 12
    with pytest.raises(InputError, match="several labels"):
        read_closed_surface(saved(tmp_path / "y.vtu", [("tetra", TETS)], cell_data={"label": [LABELS]}))


def test_kinds_that_cannot_be_used(tmp_path):
    cube = np.array([[0, 4, 6, 2, 1, 5, 7, 3]])
    with pytest.raises(InputError, match="found hexahedron"):
        read_mesh_file(saved(tmp_path / "x.vtu", [("hexahedron", cube)]))
    with pytest.raises(InputError, match="neither tets nor triangles"):
        read_mesh_file(saved(tmp_path / "x.vtk", [("line", SIDES[:, :2])]))
