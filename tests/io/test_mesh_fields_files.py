"""Meshes with data in files: what each array is taken for, what must be said, what reads back."""

import time

import meshio
import numpy as np
import pytest

from volmap.io.mesh_fields import read_mesh_fields, write_mesh_fields
from volmap.types import InputError, MeshFields, Rule, Rules, Surface, UnsaidError
from volmap.types.notice import short_caution

pv = pytest.importorskip("pyvista")
POINTS = np.array([[0.0, 0, 0], [3, 0, 0], [0, 3, 0], [0, 0, 3], [3, 3, 3]])
TETS = np.array([[0, 1, 2, 3], [1, 2, 3, 4]])


def solid(**arrays) -> "pv.UnstructuredGrid":
    made = pv.UnstructuredGrid({pv.CellType.TETRA: TETS}, POINTS)
    made.cell_data["label"] = np.array([1, 2])
    for name, values in arrays.items():
        (made.point_data if len(values) == 5 else made.cell_data)[name] = values
    return made


SIX = np.arange(30.0).reshape(5, 6)


@pytest.mark.parametrize("binary", [True, False])
def test_components_say_what_an_array_is(tmp_path, binary):
    """VTK's order of six components is xx, yy, zz, xy, yz, xz (documentation of vtkTensorGlyph)."""
    nine = np.tile(np.array([1.0, 2, 3, 2, 4, 5, 3, 5, 6]), (2, 1))
    solid(
        heat=np.arange(5.0), flow=np.arange(15.0).reshape(5, 3), d=SIX, stress=nine, part=np.array([7, 8])
    ).save(tmp_path / "m.vtu", binary=binary)
    rules = Rules(Rule.FLUX, {"d": Rule.TURN})
    fields, findings = read_mesh_fields(tmp_path / "m.vtu", rules)
    said = {q.name: (q.rank, q.rule) for q in (*fields.at_points, *fields.at_cells)}
    assert said == {
        "heat": (0, Rule.VALUE), "flow": (1, Rule.FLUX), "d": (2, Rule.TURN), "stress": (2, Rule.FLUX),
    }  # fmt: skip
    d = next(q.values for q in fields.at_points if q.name == "d")
    np.testing.assert_array_equal(d[1], [[6, 9, 11], [9, 7, 10], [11, 10, 8]])
    np.testing.assert_array_equal(fields.at_cells[0].values[0], [[1, 2, 3], [2, 4, 5], [3, 5, 6]])
    np.testing.assert_array_equal(fields.kept_at_cells["part"], [7, 8])
    assert fields.body.labels.tolist() == [1, 2]
    assert [f.code for f in findings] == ["values-kept"]
    assert "heat" in findings[0].sentence
    assert "--rule heat=density" in findings[0].remedy


def test_what_is_written_reads_back_here_and_in_vtk(tmp_path):
    solid(heat=np.arange(5.0), flow=np.arange(15.0).reshape(5, 3), d=SIX).save(tmp_path / "m.vtu")
    rules = Rules(Rule.LINE, {"heat": Rule.DENSITY})
    fields, _ = read_mesh_fields(tmp_path / "m.vtu", rules)
    write_mesh_fields(tmp_path / "out.vtu", fields)
    again, findings = read_mesh_fields(tmp_path / "out.vtu", rules)
    assert findings == ()
    for here, there in zip(fields.at_points, again.at_points, strict=True):
        np.testing.assert_array_equal(here.values, there.values)
    read = pv.read(tmp_path / "out.vtu")
    np.testing.assert_array_equal(read["flow"], np.arange(15.0).reshape(5, 3))
    np.testing.assert_array_equal(read["d"][1], [6, 9, 11, 9, 7, 10, 11, 10, 8])
    assert read.field_data["rules"][0] == "heat: density; flow: line; d: line"


@pytest.mark.parametrize(
    ("arrays", "rules", "said"),
    [
        ({"flow": np.ones((5, 3))}, Rules(), "nothing says how the vector flow changes"),
        ({"d": SIX}, Rules(Rule.VALUE), "nothing says how the symmetric tensor d changes"),
        ({"two": np.ones((5, 2))}, Rules(Rule.TURN), "the array two has 2 components"),
        ({"heat": np.ones(5)}, Rules(None, {"hot": Rule.VALUE}), "holds no quantity 'hot'"),
        ({"heat": np.ones(5)}, Rules(left_out=("hot",)), "holds no quantity 'hot'"),
    ],
)
def test_what_must_be_said(tmp_path, arrays, rules, said):
    solid(**arrays).save(tmp_path / "m.vtu")
    with pytest.raises(UnsaidError) as caught:
        read_mesh_fields(tmp_path / "m.vtu", rules)
    assert said in caught.value.sentence
    assert caught.value.sentence.startswith("m.vtu")


def test_arrays_may_be_left_out_or_kept_as_bare_numbers(tmp_path):
    colours = np.arange(15, dtype=np.uint8).reshape(5, 3)
    solid(
        flow=np.ones((5, 3)), stretch=np.full((5, 3), 2.0), rgb=colours, skew=np.arange(18.0).reshape(2, 9)
    ).save(tmp_path / "m.vtu")
    rules = Rules(None, {"stretch": Rule.VALUE}, ("flow", "skew"))
    fields, findings = read_mesh_fields(tmp_path / "m.vtu", rules)
    assert not fields.at_points + fields.at_cells
    assert sorted(fields.kept_at_points) == ["rgb", "stretch"]
    assert [f.sentence for f in findings] == ["left out, as asked for: flow, skew"]
    with pytest.raises(InputError, match="array skew: holds tensors that are not symmetric"):
        read_mesh_fields(tmp_path / "m.vtu", Rules(Rule.TURN, {"stretch": Rule.VALUE}))


@pytest.mark.parametrize("ending", ["stl", "ply"])
def test_surfaces_of_other_programs(tmp_path, ending):
    """Written and read by VTK; STL holds single precision."""
    ball = pv.Sphere(theta_resolution=12, phi_resolution=12)
    ball.save(tmp_path / f"ball.{ending}")
    fields, findings = read_mesh_fields(tmp_path / f"ball.{ending}", Rules())
    assert not fields.at_points + fields.at_cells
    assert len(fields.cells) == ball.n_cells
    assert {f.code for f in findings} >= {"one-label"}
    for out in ("out.vtp", "out.stl", "out.ply"):
        write_mesh_fields(tmp_path / out, fields)
        again = pv.read(tmp_path / out)
        assert again.n_cells == ball.n_cells
        np.testing.assert_allclose(again.volume, ball.volume, rtol=1e-5)
    with pytest.raises(InputError, match=r"expected a name that ends in \.vtp or \.stl or \.ply"):
        write_mesh_fields(tmp_path / "out.vtu", fields)


def test_a_surface_with_data_needs_a_format_that_holds_them(tmp_path):
    triangles = [("triangle", np.array([[0, 1, 2], [1, 2, 3]]))]
    meshio.Mesh(POINTS[:4], triangles, point_data={"heat": np.arange(4.0)}).write(tmp_path / "s.vtu")
    fields, _ = read_mesh_fields(tmp_path / "s.vtu", Rules(Rule.VALUE))
    with pytest.raises(InputError, match=r"out\.stl: cannot hold what lies on the surface, found heat"):
        write_mesh_fields(tmp_path / "out.stl", fields)
    write_mesh_fields(tmp_path / "out.vtp", fields)
    np.testing.assert_array_equal(pv.read(tmp_path / "out.vtp")["heat"], np.arange(4.0))


@pytest.mark.parametrize("name", ["a.stl", "a.ply"])
def test_bare_triangles_hold_the_caution_and_no_day(tmp_path, name):
    triangles = np.array([[0, 2, 1], [0, 1, 3], [0, 3, 2], [1, 2, 3]])
    points = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.25]])
    body = Surface(points, triangles, np.tile([1, 0], (4, 1)))
    write_mesh_fields(tmp_path / name, MeshFields(body))
    raw = (tmp_path / name).read_bytes()
    assert short_caution().encode() in raw[:300]
    assert time.strftime("%Y").encode() not in raw[:300]
    found = pv.read(tmp_path / name)  # another reader takes the header as it is
    assert found.n_cells == 4
    assert found.volume == pytest.approx(1.25 / 6, rel=1e-6)
