"""Polylines in CSV and VTP: what reads back, what other programs read, sentences about damage."""

import csv

import numpy as np
import pytest

from volmap.io.polylines import holds_lines, read_polylines, write_polylines
from volmap.types import InputError, Polylines

HEAD = "line,x_mm,y_mm,z_mm\n"


@pytest.fixture
def lines() -> Polylines:
    points = np.random.default_rng(0).normal(size=(9, 3)) / 3
    return Polylines(("left", "ä, b", "3"), points, np.array([0, 2, 6, 9]))


def test_csv_reads_back_and_python_reads_it_too(tmp_path, lines):
    write_polylines(tmp_path / "l.csv", lines)
    again, findings = read_polylines(tmp_path / "l.csv")
    assert findings == ()
    assert again.names == lines.names
    np.testing.assert_array_equal(again.points, lines.points)
    np.testing.assert_array_equal(again.starts, lines.starts)
    with (tmp_path / "l.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["line"] for row in rows] == ["left"] * 2 + ["ä, b"] * 4 + ["3"] * 3
    assert [float(row["z_mm"]) for row in rows] == lines.points[:, 2].tolist()


def test_vtp_reads_back_and_pyvista_reads_it_too(tmp_path, lines):
    pv = pytest.importorskip("pyvista")
    write_polylines(tmp_path / "l.vtp", lines)
    again, findings = read_polylines(tmp_path / "l.vtp")
    assert findings == ()
    assert again.names == ("1", "2", "3")
    np.testing.assert_array_equal(again.points, lines.points)
    np.testing.assert_array_equal(again.starts, lines.starts)
    read = pv.read(tmp_path / "l.vtp")
    assert read.n_lines == 3
    np.testing.assert_allclose(read["length_mm"], lines.lengths_mm)
    np.testing.assert_allclose(
        read.compute_arc_length()["arc_length"].max(), lines.lengths_mm.max(), rtol=1e-6
    )


@pytest.mark.parametrize("ending", ["vtp", "vtk"])
@pytest.mark.parametrize("binary", [True, False])
def test_lines_of_another_program(tmp_path, binary, ending):
    """Written by VTK: lines that share points, beside a triangle and data, which are named as left out."""
    pv = pytest.importorskip("pyvista")
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 2, 0], [0, 0, 5.0]])
    made = pv.PolyData(points, lines=[3, 0, 1, 2, 2, 3, 0], faces=[3, 0, 1, 2])
    made.point_data["heat"] = np.arange(4.0)
    made.save(tmp_path / f"l.{ending}", binary=binary)
    assert not holds_lines(tmp_path / f"l.{ending}")  # with a polygon it goes as a mesh unless asked for
    lines, findings = read_polylines(tmp_path / f"l.{ending}")
    np.testing.assert_array_equal(lines.points, points[[0, 1, 2, 3, 0]])
    assert lines.starts.tolist() == [0, 3, 5]
    np.testing.assert_allclose(lines.lengths_mm, [3, 5])
    assert [f.sentence for f in findings] == ["only its lines are carried; left out: polys, heat"]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (HEAD + "a,0,0,0\na,1,0,0\nb,0,0,0\n", "line b: a line has fewer than two points"),
        (HEAD + "a,0,0,0\na,1,0,0\nb,0,0,0\nb,0,0,1\na,2,0,0\n", "do not follow each other, found line a"),
        (HEAD + "a,0,0,0\na,1,,0\n", "row 3: a point lacks its line or a finite coordinate"),
        (HEAD + "a,0,0,0\n,1,0,0\n", "row 3: a point lacks its line"),
        (HEAD + "a,0,0,x\n", "row 2: z_mm is not a number"),
        (HEAD, "holds no line"),
        ("line,x_mm,y_mm\na,0,0\n", "the header is not that of lines"),
        ("line,x_mm,y_mm,z_mm,t1_ms\na,0,0,0,5\n", "the header is not that of lines"),
    ],
)
def test_damaged_csv(tmp_path, text, said):
    (tmp_path / "l.csv").write_text(text, encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read_polylines(tmp_path / "l.csv")
    assert said in caught.value.sentence
    assert caught.value.sentence.startswith("l.csv")


def test_damaged_vtp(tmp_path, lines):
    write_polylines(tmp_path / "l.vtp", lines)
    whole = (tmp_path / "l.vtp").read_bytes()
    for at in range(0, len(whole), 97):
        (tmp_path / "cut.vtp").write_bytes(whole[:at] or b" ")
        with pytest.raises(InputError, match=r"^cut\.vtp"):
            read_polylines(tmp_path / "cut.vtp")
    pv = pytest.importorskip("pyvista")
    pv.Sphere().save(tmp_path / "ball.vtp")
    with pytest.raises(InputError, match="holds no lines"):
        read_polylines(tmp_path / "ball.vtp")
