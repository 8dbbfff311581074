"""The section of a given boundary: only there when one was given, with every row and place."""

from volmap.report.tables import given_boundary, told
from volmap.types import Certificate, Gate, Verdict

ROW = {
    "tolerance_mm": 0.25,
    "kept": False,
    "rms_mm": 0.2,
    "max_mm": 0.75,
    "distortion": 0.0123,
    "smallest_ratio": 0.04,
    "where_mm": [1.0, -2.0, 3.0],
}
VALUE = {
    "mean": 0.1,
    "p95": 0.2,
    "max": 0.75,
    "tolerance_mm": 0.25,
    "surface_gap_mm": 0.05,
    "at_file_points": {"mean": 0.11, "p95": 0.22, "max": 0.8},
    "giving_way": [ROW, ROW | {"tolerance_mm": 1.0, "kept": True}],
}
PLACE = {"point_mm": [4.0, 5.0, 6.0], "space": "source", "note": "the map gives way by 0.750 mm"}


def certificate(*gates):
    return Certificate({}, {}, gates)


def gate(value):
    return Gate("given_boundary_mm", value, "mm", {}, {}, "a law", Verdict.WARN, (PLACE,), "A sentence.")


def test_without_a_given_boundary_there_is_no_section():
    assert given_boundary(certificate()) is None
    assert given_boundary(certificate(gate(None))) is None


def test_rows_and_places_are_told():
    section = given_boundary(certificate(gate(VALUE)))
    assert section["sentence"] == "A sentence."
    assert [(r["tolerance"], r["asked"], r["kept"]) for r in section["rows"]] == [
        ("0.250", True, False),
        ("1.000", False, True),
    ]
    assert section["rows"][0]["max"] == "0.750"
    assert section["places"] == ["(4.0, 5.0, 6.0) mm in A: the map gives way by 0.750 mm"]
    assert section["at_file"]["max"] == "0.80"


def test_the_table_is_not_told_twice():
    assert not any("giving way" in line for line in told(VALUE, "mm", {}, set()))
