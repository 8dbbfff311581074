"""VTU and VTP: written by us and read by VTK, written by VTK and read by us, damaged in every way."""

import base64
import contextlib
import re

import meshio
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from vtkmodules.util.numpy_support import vtk_to_numpy
from vtkmodules.vtkIOXML import (
    vtkXMLPolyDataReader,
    vtkXMLUnstructuredGridReader,
    vtkXMLUnstructuredGridWriter,
)

from volmap.io.vtk_xml import read_mesh, read_surface, write_mesh, write_surface
from volmap.types import InputError, TetMesh
from volmap.types.notice import caution

ASCII, BINARY, APPENDED = 0, 1, 2


def mesh():
    points = np.random.default_rng(0).normal(size=(9, 3))
    tets = np.array([[0, 1, 2, 3], [1, 2, 3, 4], [4, 5, 6, 7]])
    return TetMesh(points, tets, np.array([1, 2, 65535]))


def write(path, **more):
    m = mesh()
    write_mesh(
        path,
        m,
        point_data={"image_mm": m.points * 2},
        cell_data={"stretch": np.arange(9.0).reshape(3, 3), "folded": np.array([True, False, True])},
        field_data={"status": "in Ordnung, größer", "steps": 7, "weights": np.array([0.5, 0.25])},
        **more,
    )
    return m


def test_vtk_reads_what_was_written(tmp_path):
    # Independent library: VTK's own reader.
    m = write(tmp_path / "größe.vtu")
    reader = vtkXMLUnstructuredGridReader()
    reader.SetFileName(str(tmp_path / "größe.vtu"))
    reader.Update()
    data = reader.GetOutput()
    assert np.array_equal(vtk_to_numpy(data.GetPoints().GetData()), m.points)
    assert np.array_equal(vtk_to_numpy(data.GetCells().GetConnectivityArray()).reshape(-1, 4), m.tets)
    assert [data.GetCellType(i) for i in range(3)] == [10, 10, 10]
    assert vtk_to_numpy(data.GetCellData().GetArray("label")).tolist() == [1, 2, 65535]
    assert np.array_equal(vtk_to_numpy(data.GetPointData().GetArray("image_mm")), m.points * 2)
    words = {n: data.GetFieldData().GetAbstractArray(n).GetValue(0) for n in ("frame", "units", "notice")}
    assert words == {"frame": "RAS+ mm", "units": "mm", "notice": caution()}


def test_a_mesh_comes_back_with_everything(tmp_path):
    m = write(tmp_path / "m.vtu")
    back, point_data, cell_data, field_data = read_mesh(tmp_path / "m.vtu")
    assert np.array_equal(back.points, m.points)
    assert np.array_equal(back.tets, m.tets)
    assert np.array_equal(back.labels, m.labels)
    assert np.array_equal(point_data["image_mm"], m.points * 2)
    assert cell_data["stretch"].tolist() == np.arange(9.0).reshape(3, 3).tolist()
    assert cell_data["folded"].tolist() == [1, 0, 1]
    assert field_data["status"] == "in Ordnung, größer"
    assert field_data["steps"].tolist() == [7]
    assert field_data["weights"].tolist() == [0.5, 0.25]
    assert field_data["notice"] == caution()


@pytest.mark.parametrize("mode", [ASCII, BINARY, APPENDED])
@pytest.mark.parametrize("packed", [True, False])
@pytest.mark.parametrize("base64", [True, False])
@pytest.mark.parametrize("header", ["UInt32", "UInt64"])
def test_reads_every_way_vtk_writes(tmp_path, mode, packed, base64, header):
    # Independent library: VTK's own writer; 2 kB of packing blocks so that there are several.
    m = write(tmp_path / "m.vtu")
    reader = vtkXMLUnstructuredGridReader()
    reader.SetFileName(str(tmp_path / "m.vtu"))
    reader.Update()
    writer = vtkXMLUnstructuredGridWriter()
    writer.SetInputData(reader.GetOutput())
    writer.SetFileName(str(tmp_path / "v.vtu"))
    writer.SetDataMode(mode)
    writer.SetEncodeAppendedData(base64)
    writer.SetCompressorTypeToZLib() if packed else writer.SetCompressorTypeToNone()
    writer.SetBlockSize(64)
    writer.SetHeaderTypeToUInt32() if header == "UInt32" else writer.SetHeaderTypeToUInt64()
    assert writer.Write()
    back, point_data, cell_data, field_data = read_mesh(tmp_path / "v.vtu")
    close = np.allclose if mode == ASCII else np.array_equal
    assert close(back.points, m.points)
    assert np.array_equal(back.tets, m.tets)
    assert close(point_data["image_mm"], m.points * 2)
    assert cell_data["stretch"].shape == (3, 3)
    assert field_data["status"] == "in Ordnung, größer"


@pytest.mark.parametrize("packing", [None, "zlib"])
def test_reads_what_meshio_writes(tmp_path, packing):
    # Independent library: meshio codes the header and the values of a plain block as one.
    m = mesh()
    made = meshio.Mesh(m.points, [("tetra", m.tets)], cell_data={"label": [m.labels]})
    meshio.vtu.write(tmp_path / "m.vtu", made, compression=packing)
    back = read_mesh(tmp_path / "m.vtu")[0]
    assert np.array_equal(back.points, m.points)
    assert np.array_equal(back.tets, m.tets)
    assert np.array_equal(back.labels, m.labels)


def test_reads_a_header_coded_apart_from_its_values(tmp_path):
    # Law: base64 of header and values as one or as two codes is the same array (writers do either).
    m = mesh()
    made = meshio.Mesh(m.points, [("tetra", m.tets)], cell_data={"label": [m.labels]})
    meshio.vtu.write(tmp_path / "m.vtu", made, compression=None)
    as_one = (tmp_path / "m.vtu").read_text()

    def apart(found):
        data = base64.b64decode(found.group(1))
        return ">" + base64.b64encode(data[:4]).decode() + base64.b64encode(data[4:]).decode() + "<"

    as_two = re.sub(r">\s*([A-Za-z0-9+/]{8,}={0,2})\s*<", apart, as_one)
    assert as_two != as_one
    (tmp_path / "m.vtu").write_text(as_two)
    back = read_mesh(tmp_path / "m.vtu")[0]
    assert np.array_equal(back.points, m.points)
    assert np.array_equal(back.tets, m.tets)


def test_same_mesh_same_bytes(tmp_path):
    write(tmp_path / "a.vtu")
    write(tmp_path / "b.vtu")
    assert (tmp_path / "a.vtu").read_bytes() == (tmp_path / "b.vtu").read_bytes()


def test_a_surface_comes_back_and_vtk_reads_it(tmp_path):
    surface = mesh().interfaces
    write_surface(tmp_path / "s.vtp", surface)
    back = read_surface(tmp_path / "s.vtp")
    assert np.array_equal(back.points, surface.points)
    assert np.array_equal(back.triangles, surface.triangles)
    assert np.array_equal(back.sides, surface.sides)
    reader = vtkXMLPolyDataReader()
    reader.SetFileName(str(tmp_path / "s.vtp"))
    reader.Update()
    data = reader.GetOutput().GetCellData()
    assert np.array_equal(vtk_to_numpy(data.GetArray("label_inside")), surface.sides[:, 0])
    assert np.array_equal(vtk_to_numpy(data.GetArray("label_outside")), surface.sides[:, 1])


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"<VTKFile", b"<VTXFile", "not a VTK XML"),
        (b'type="UnstructuredGrid"', b'type="ImageData"', "another kind"),
        (b"vtkZLibDataCompressor", b"vtkLZ4DataCompressor", "zlib"),
        (b'Name="label"', b'Name="lable"', "label"),
        (b'NumberOfPoints="9"', b'NumberOfPoints="8"', "fit|contradicts"),
        (b'NumberOfPoints="9"', b'NumberOfPoints="9999999999"', "fit|contradicts"),
        (b'Name="connectivity"', b'Name="connectivita"', "4 corners"),
        (b'Name="types"', b'Name="tipes"', "tetrahedra"),
        (b'Name="Points" NumberOfComponents="3"', b'Name="Points" NumberOfComponents="2"', "damaged|points"),
        (b"</Piece>", b"</Piece><Piece></Piece>", "one piece"),
        (b"<VTKFile", b"<!DOCTYPE a><VTKFile", "declarations"),
        (b"</AppendedData>", b"", "end of the appended"),
        (b"</Points>", b"", "damaged"),
    ],
)
def test_a_damaged_file_is_one_sentence(tmp_path, capfd, old, new, words):
    write(tmp_path / "m.vtu")
    data = (tmp_path / "m.vtu").read_bytes()
    assert old in data
    (tmp_path / "m.vtu").write_bytes(data.replace(old, new, 1))
    with pytest.raises(InputError, match=words) as caught:
        read_mesh(tmp_path / "m.vtu")
    assert caught.value.sentence.startswith("m.vtu: ")
    assert capfd.readouterr() == ("", "")


def test_a_point_at_infinity_and_a_label_0(tmp_path):
    m = mesh()
    write_mesh(tmp_path / "m.vtu", m)
    text = (tmp_path / "m.vtu").read_text()
    head = text[: text.index('<DataArray type="Int64" Name="label"')]
    rest = text[text.index('<DataArray type="Int64" Name="label"') :]
    rest = rest[rest.index("/>") + 2 :]
    zero = '<DataArray type="Int64" Name="label" format="ascii">1 0 2</DataArray>'
    (tmp_path / "z.vtu").write_text(head + zero + rest)
    with pytest.raises(InputError, match="start at 1"):
        read_mesh(tmp_path / "z.vtu")
    (tmp_path / "z.vtu").write_text(head + zero.replace("1 0 2", "1 two 2") + rest)
    with pytest.raises(InputError, match="text where numbers"):
        read_mesh(tmp_path / "z.vtu")


def test_writers_refuse_what_does_not_fit(tmp_path):
    with pytest.raises(InputError, match="fit"):
        write_mesh(tmp_path / "m.vtu", mesh(), cell_data={"x": np.zeros(2)})
    with pytest.raises(InputError, match="numbers"):
        write_mesh(tmp_path / "m.vtu", mesh(), cell_data={"x": np.array(["a", "b", "c"])})
    with pytest.raises(InputError, match=r"\.vtu"):
        write_mesh(tmp_path / "m.vtk", mesh())
    assert list(tmp_path.iterdir()) == []


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(at=st.floats(0, 1), byte=st.integers(0, 255), cut=st.booleans())
def test_changed_or_cut_anywhere(tmp_path, at, byte, cut):
    # Law: any bytes are read or refused; never another exception, never a crash.
    path = tmp_path / "m.vtu"
    if not (tmp_path / "good.vtu").exists():
        write(tmp_path / "good.vtu")
    data = bytearray((tmp_path / "good.vtu").read_bytes().rstrip())
    place = int(at * (len(data) - 1))
    if cut:
        del data[place:]
    else:
        data[place] = byte
    path.write_bytes(data or b" ")
    with contextlib.suppress(InputError):
        read_mesh(path)
        assert not cut
