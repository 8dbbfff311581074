"""Measurement tables: what the headings say, numbers that read back, and sentences about damage."""

import csv

import numpy as np
import pytest
from pyarrow import parquet

from volmap.io.csv_columns import read_columns, write_columns
from volmap.io.measurements import quantity_columns, read_measurements, write_measurements
from volmap.types import InputError, Measurements, Quantity, Rule, Rules, UnsaidError

PLACE = "name,x_mm,y_mm,z_mm"
TENSOR = ",".join(f"d_{c}_mm2_per_s" for c in ("xx", "yy", "zz", "xy", "xz", "yz"))


@pytest.mark.parametrize(
    ("columns", "name", "unit", "rank"),
    [
        ("t1_ms", "t1", "ms", 0),
        ("activity_kBq_per_ml", "activity", "kBq_per_ml", 0),
        ("volume_ratio_1", "volume_ratio", "1", 0),
        ("curvature_1_per_mm", "curvature", "1_per_mm", 0),
        ("flow_y_mm_per_s,flow_z_mm_per_s,flow_x_mm_per_s", "flow", "mm_per_s", 1),
        ("peak_flow_x_ml_per_s,peak_flow_y_ml_per_s,peak_flow_z_ml_per_s", "peak_flow", "ml_per_s", 1),
        (TENSOR, "d", "mm2_per_s", 2),
    ],
)
def test_headings(columns, name, unit, rank):
    groups, texts = quantity_columns((*PLACE.split(","), *columns.split(","), "site"), "t.csv")
    assert [(g.name, g.unit, g.rank) for g in groups] == [(name, unit, rank)]
    assert texts == ("site",)
    assert sorted(groups[0].headings) == sorted(columns.split(","))


@pytest.mark.parametrize(
    ("header", "said"),
    [
        ("x_mm,y_mm,z_mm,t1_ms", "is not that of a table of places"),
        ("name;x_mm;y_mm;z_mm", "is not that of a table of places"),
        (f"{PLACE},flow_x_mm,flow_y_mm", "a vector lacks a component, found flow_x_mm alone"),
        (f"{PLACE},{TENSOR.removesuffix(',d_yz_mm2_per_s')}", "expected d_yz_mm2_per_s beside it"),
        (f"{PLACE},to_x_mm,to_y_mm,to_z_mm", "holds pairs of points"),
        (f"{PLACE},t1_ms,t1_s", "the quantity t1 stands twice"),
        (f"{PLACE},t1_ms,t1_ms", "a column stands twice"),
        (f"{PLACE},t1_", "names no quantity with its unit"),
        (f"{PLACE},_ms", "names no quantity with its unit"),
        (f"{PLACE},,t1_ms", "no heading"),
    ],
)
def test_headings_that_are_none(tmp_path, header, said):
    (tmp_path / "t.csv").write_text(header + "\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"^t\.csv") as caught:
        read_measurements(tmp_path / "t.csv", Rules(Rule.VALUE))
    assert said in caught.value.sentence


ROWS = f"{PLACE},t1_ms\na,1,2,3,900\n"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (ROWS + "b,1,2,x,1\n", "row 3: z_mm is not a number, found 'x'"),
        (ROWS + "b,1,2,3,1_000\n", "row 3: t1_ms is not a number"),
        (ROWS + "b,1,2\n", "row 3: a row has the wrong number of columns, found 3, expected 5"),
        (ROWS + "b,1,2,,5\n", "row 3: a place lacks a finite coordinate"),
        (ROWS + "b,1,2,inf,5\n", "row 3: a place lacks a finite coordinate"),
        (ROWS + "b,1,2,3,inf\n", "t1: holds infinite values"),
        (ROWS[: len(PLACE) + 7], "holds no place"),
        (ROWS + '"b,1,2,3,5\n', "row 3"),
    ],
)
def test_damaged_rows(tmp_path, text, said):
    (tmp_path / "t.csv").write_text(text, encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read_measurements(tmp_path / "t.csv", Rules(Rule.VALUE))
    assert said in caught.value.sentence
    assert caught.value.sentence.startswith("t.csv")


def test_bytes_that_are_no_text(tmp_path):
    (tmp_path / "t.csv").write_bytes(ROWS.encode() + b"\xff,1,2,3,4\n")
    with pytest.raises(InputError, match=r"t\.csv, row 3: the file is not CSV in UTF-8"):
        read_measurements(tmp_path / "t.csv", Rules(Rule.VALUE))
    (tmp_path / "t.csv").write_bytes(b"\xff\xfe" + ROWS.encode("utf-16-le"))
    with pytest.raises(InputError, match="no line of CSV in UTF-8"):
        read_measurements(tmp_path / "t.csv", Rules(Rule.VALUE))


def test_a_rule_must_be_said_for_every_quantity(tmp_path):
    flow = "flow_x_ml,flow_y_ml,flow_z_ml"
    (tmp_path / "t.csv").write_text(f"{PLACE},t1_ms,{flow}\na,1,2,3,900,1,0,0\n", encoding="utf-8")
    with pytest.raises(UnsaidError, match="nothing says how the scalar t1 changes") as caught:
        read_measurements(tmp_path / "t.csv", Rules(Rule.TURN))
    assert "--rule t1=value" in caught.value.sentence
    with pytest.raises(UnsaidError, match="holds no quantity 't2'"):
        read_measurements(tmp_path / "t.csv", Rules(Rule.TURN, {"t2": Rule.VALUE}))
    with pytest.raises(InputError, match="t1: is no rule for a scalar, found flux"):
        read_measurements(tmp_path / "t.csv", Rules(Rule.TURN, {"t1": Rule.FLUX}))
    read = read_measurements(tmp_path / "t.csv", Rules(Rule.TURN, {"t1": Rule.DENSITY}))
    assert [(q.name, q.rule) for q in read.quantities] == [("t1", Rule.DENSITY), ("flow", Rule.TURN)]


def test_written_tables_read_back_and_python_reads_them_too(tmp_path):
    """Numbers to the last bit, names and texts of any letters; independent reader: Python's csv."""
    random = np.random.default_rng(0)
    scalars, vectors = random.normal(size=5) * 1e-7, random.normal(size=(5, 3)) * 1e9
    scalars[2] = np.nan
    tensors = random.normal(size=(5, 3, 3))
    tensors += tensors.swapaxes(1, 2)
    measured = Measurements(
        ("a", "ä b", 'c,"d"', "e", "a"),
        random.normal(size=(5, 3)) / 3,
        (
            Quantity("t1", "ms", scalars, Rule.VALUE),
            Quantity("flow", "mm_per_s", vectors, Rule.FLUX),
            Quantity("d", "mm2_per_s", tensors, Rule.TURN),
        ),
        {"site": ("left", "", "right", "x", "y")},
    )
    write_measurements(tmp_path / "t.csv", measured)
    rules = Rules(None, {q.name: q.rule for q in measured.quantities})
    again = read_measurements(tmp_path / "t.csv", rules)
    assert again.names == measured.names
    assert dict(again.texts) == dict(measured.texts)
    np.testing.assert_array_equal(again.points, measured.points)
    for here, there in zip(measured.quantities, again.quantities, strict=True):
        assert (here.name, here.unit, here.rule) == (there.name, there.unit, there.rule)
        np.testing.assert_array_equal(here.values, there.values)
    with (tmp_path / "t.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["name"] for row in rows] == list(measured.names)
    assert [float(row["d_yz_mm2_per_s"]) for row in rows] == tensors[:, 1, 2].tolist()
    assert rows[2]["t1_ms"] == ""
    with pytest.raises(InputError, match="exists already"):
        write_measurements(tmp_path / "t.csv", measured)


def test_parquet_for_statistics(tmp_path):
    """Read by pyarrow's own reader: numbers to the bit, missing values as nulls, units and rules kept."""
    measured = Measurements(
        ("a", "b"),
        np.array([[1 / 3, 2, 3], [4, 5, 6.0]]),
        (
            Quantity("t1", "ms", np.array([np.nan, 900.5]), Rule.VALUE),
            Quantity("flow", "mm_per_s", np.ones((2, 3)), Rule.FLUX),
        ),
        {"site": ("left", "ä")},
    )
    write_measurements(tmp_path / "t.parquet", measured)
    table = parquet.read_table(tmp_path / "t.parquet")
    assert table.column_names == [
        "name", "x_mm", "y_mm", "z_mm", "t1_ms", *(f"flow_{c}_mm_per_s" for c in "xyz"), "site",
    ]  # fmt: skip
    assert table["t1_ms"].to_pylist() == [None, 900.5]
    assert table["x_mm"].to_pylist() == [1 / 3, 4]
    assert table["site"].to_pylist() == ["left", "ä"]
    assert table.schema.field("flow_y_mm_per_s").metadata == {b"unit": b"mm_per_s", b"rule": b"flux"}
    assert b"research use only" in table.schema.metadata[b"notice"]
    write_measurements(tmp_path / "again.parquet", measured)
    assert (tmp_path / "again.parquet").read_bytes() == (tmp_path / "t.parquet").read_bytes()


def test_windows_lines_marks_blanks_and_empty_lines_are_read(tmp_path):
    text = f"\ufeff{PLACE},t1_ms , site\r\n a , 1.5 ,2,3, 900, left \r\n\r\nb,1,2,3,,right\r\n"
    (tmp_path / "t.csv").write_bytes(text.encode("utf-8"))
    read = read_measurements(tmp_path / "t.csv", Rules(Rule.VALUE))
    assert read.names == ("a", "b")
    assert read.texts["site"] == ("left", "right")
    np.testing.assert_array_equal(read.quantities[0].values, [900, np.nan])
    assert read.points[0].tolist() == [1.5, 2, 3]


def test_columns_of_many_rows(tmp_path):
    values = np.random.default_rng(1).normal(size=300_000)
    write_columns(tmp_path / "t.csv", {"k": [f"{i}" for i in range(300_000)], "v": values})
    columns = read_columns(tmp_path / "t.csv", ("k",))
    np.testing.assert_array_equal(columns.numbers["v"], values)
    assert columns.texts["k"][-1] == "299999"
