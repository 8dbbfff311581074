"""Tables as CSV and Parquet, read back by other libraries."""

import csv
import json

import numpy as np
import pandas
import pytest
from pyarrow import parquet

from volmap.io.tables import write_table
from volmap.types import Column, InputError, Table
from volmap.types.notice import caution


def table():
    return Table(
        (
            Column("region", np.array([1, 7, 65535]), "", "Number."),
            Column("name", ('a, "b"', "größe\nzwei", ""), "", "Name."),
            Column("volume_source", np.array([1 / 3, np.nan, 1e-300]), "mm3", "Volume."),
            Column("volume_ratio", np.array([1.0, -0.0, np.inf]), "1", "Ratio."),
            Column("reliable", np.array([True, False, True]), "", "Flag."),
        ),
        {"schema": "test/1", "through": {"source": {"name": "a.nii"}}},
    )


def test_csv_by_the_standard_library_and_by_pandas(tmp_path):
    write_table(tmp_path / "t.csv", table())
    with (tmp_path / "t.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.reader(stream))
    assert rows[0] == ["region", "name", "volume_source_mm3", "volume_ratio_1", "reliable"]
    assert rows[1] == ["1", 'a, "b"', repr(1 / 3), "1.0", "true"]
    assert rows[2] == ["7", "größe\nzwei", "", "0.0", "false"]
    assert rows[3][3] == ""  # not finite: no value
    frame = pandas.read_csv(tmp_path / "t.csv")
    assert frame["volume_source_mm3"][0] == pytest.approx(1 / 3, rel=1e-15)
    assert np.isnan(frame["volume_source_mm3"][1])
    assert frame["volume_source_mm3"][2] == 1e-300
    assert frame["reliable"].tolist() == [True, False, True]
    assert frame["region"].tolist() == [1, 7, 65535]


def test_parquet_has_types_units_and_the_caution(tmp_path):
    write_table(tmp_path / "t.parquet", table())
    found = parquet.read_table(tmp_path / "t.parquet")
    assert [str(f.type) for f in found.schema] == ["int64", "string", "double", "double", "bool"]
    field = found.schema.field("volume_source_mm3")
    assert field.metadata[b"unit"] == b"mm3"
    assert field.metadata[b"meaning"] == b"Volume."
    assert found.schema.metadata[b"notice"].decode() == caution()
    assert json.loads(found.schema.metadata[b"through"]) == {"source": {"name": "a.nii"}}
    assert found["volume_source_mm3"].to_pylist() == [1 / 3, None, 1e-300]
    assert found["name"].to_pylist()[1] == "größe\nzwei"
    frame = pandas.read_parquet(tmp_path / "t.parquet")
    assert frame["volume_ratio_1"].tolist()[:2] == [1.0, 0.0]


@pytest.mark.parametrize("name", ["t.csv", "t.parquet"])
def test_same_bytes_and_a_json_beside(tmp_path, name):
    for turn in ("a", "b"):
        (tmp_path / turn).mkdir()
        write_table(tmp_path / turn / name, table())
    for file in (name, f"{name}.json"):
        assert (tmp_path / "a" / file).read_bytes() == (tmp_path / "b" / file).read_bytes()
    told = json.loads((tmp_path / "a" / f"{name}.json").read_text(encoding="utf-8"))
    assert told["notice"] == caution()
    assert told["schema"] == "test/1"
    assert told["rows"] == 3
    assert told["columns"][2] == {"header": "volume_source_mm3", "unit": "mm3", "meaning": "Volume."}


def test_both_files_or_none(tmp_path):
    (tmp_path / "t.csv.json").write_text("mine", encoding="utf-8")
    with pytest.raises(InputError, match="exists already"):
        write_table(tmp_path / "t.csv", table())
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv.json"]
    write_table(tmp_path / "t.csv", table(), overwrite=True)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["t.csv", "t.csv.json"]


def test_another_ending_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"\.csv or \.parquet"):
        write_table(tmp_path / "t.xlsx", table())
    assert not list(tmp_path.iterdir())


def test_columns_of_two_lengths_or_one_header_twice():
    with pytest.raises(InputError):
        Table((Column("a", np.zeros(2)), Column("b", np.zeros(3))))
    with pytest.raises(InputError):
        Table((Column("a", np.zeros(2), "mm"), Column("a_mm", np.zeros(2))))
