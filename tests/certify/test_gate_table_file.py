"""The gate table and a user's own in its place."""

import tomllib
from importlib.resources import files

import pytest

from volmap.certify import read_gate_table
from volmap.certify.judge import judged, tripped
from volmap.certify.table import STATISTICS
from volmap.types import InputError

OWN = files("volmap_shared").joinpath("gates.toml").read_text(encoding="utf-8")


def written(tmp_path, text):
    path = tmp_path / "own.toml"
    path.write_text(text, encoding="utf-8")
    return path


ONLY_WARNS = {"solve_settled"}  # an unfinished map is judged by all the other gates


def test_every_gate_has_a_unit_a_source_and_a_limit_that_fails():
    table = read_gate_table()
    assert set(table.limits) == set(STATISTICS)
    for name, limit in table.limits.items():
        assert limit.unit
        assert len(limit.source) > 40
        assert limit.warns_at(1.0) if name in ONLY_WARNS else limit.fails_at(1.0)


def test_a_warning_comes_before_the_failure():
    for limit in read_gate_table().limits.values():
        warn, fail = limit.warns_at(2.0), limit.fails_at(2.0)
        for key in set(warn) & set(fail):
            assert (warn[key] < fail[key]) == key.endswith("_above")


def test_the_exact_gates_allow_nothing():
    table = read_gate_table()
    for name in ("inverted_tets", "boundary_crossings"):
        assert table[name].fails_at(1.0) == {"count_above": 0.0}


def test_limits_in_voxels_become_millimetres():
    limit = read_gate_table()["boundary_distance_mm"]
    assert limit.warns_at(1.5) == {"mean_above": pytest.approx(0.525), "max_above": 3.0}


def test_a_users_own_table_counts(tmp_path):
    changed = OWN.replace("mean_above = 0.35, max_above = 2.0", "mean_above = 0.2, max_above = 1.5")
    assert changed != OWN
    table = read_gate_table(written(tmp_path, changed))
    assert table["boundary_distance_mm"].warns_at(1.0) == {"mean_above": 0.2, "max_above": 1.5}


@pytest.mark.parametrize(
    ("change", "fault"),
    [
        (lambda t: t + "\nnot toml", "not TOML"),
        (lambda t: t.replace("volmap-gates/1", "volmap-gates/9"), "another schema"),
        (lambda t: t.replace("[gate.overlap]", "[gate.overlaps]"), "missing overlap; unknown overlaps"),
        (lambda t: t.replace("max_above = 2.0", "maximum_above = 2.0"), "names no statistic"),
        (lambda t: t.replace("max_above = 2.0", 'max_above = "2"'), "not a number"),
        (lambda t: t.replace("max_above = 2.0", "max_above = nan"), "not a number"),
        (lambda t: t.replace("max_above = 2.0", "max_above = true"), "not a number"),
        (lambda t: t.replace('unit = "Dice"', 'unit = " "'), "does not say its unit"),
        (lambda t: t.replace('unit = "Dice"', 'unit = "Dice"\ncolour = "red"'), "unknown keys"),
        (lambda t: t.replace("fail = { labels", "fail_voxel = { labels"), "not a length"),
        (lambda t: t.replace("warn = { p95_above = 2.0 }", "warn = { mean_above = 2.0 }"), "two units"),
        (lambda t: t.replace("warn = { share_above = 0.0 }", "warn = 0.0"), "not a table"),
    ],
)
def test_faults_are_named(tmp_path, change, fault):
    assert change(OWN) != OWN
    with pytest.raises(InputError, match=fault) as caught:
        read_gate_table(written(tmp_path, change(OWN)))
    assert "own.toml" in caught.value.sentence
    assert not caught.value.refused


def test_a_table_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match=r"none\.toml.*cannot be read"):
        read_gate_table(tmp_path / "none.toml")
    (tmp_path / "bytes.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="cannot be read"):
        read_gate_table(tmp_path / "bytes.toml")


def test_the_table_ships_as_package_data():
    assert tomllib.loads(OWN)["schema"] == "volmap-gates/1"


def test_limits_hold_at_the_limit_and_never_for_nan():
    limits = {"mean_above": 1.0, "min_below": 0.1, "max_above": 2.0}
    assert tripped({"mean": 1.0, "min": 0.1}, limits) == []
    assert tripped({"mean": 1.01, "min": 0.09}, limits) == ["mean 1.01 above 1", "min 0.09 below 0.1"]
    assert len(tripped({"mean": float("nan"), "max": float("nan")}, limits)) == 2


@pytest.mark.parametrize(
    ("gate", "statistics", "said"),
    [
        ("overlap", {"shell": 1e9}, "shell 1e+09 above"),
        ("field_folds", {"share": 7.0, "count": 3}, "share 7 above 0.1 (% of cubes)."),
        ("inverted_tets", {"count": 2.0}, "count 2 above 0 (tets)."),
        ("volume_ratio", {"min": -1.0, "p0_1": 1, "p99_9": 1, "max": 1}, "min -1 below"),
    ],
)
def test_a_tripped_limit_is_told_with_its_unit(gate, statistics, said):
    # law: a number has a unit; the shell of an overlap is a length although Dice has none
    sentence = judged(read_gate_table()[gate], statistics, value=None, sentence="Found.").sentence
    assert said in sentence
    ending = {"overlap": " (mm).", "volume_ratio": "."}.get(gate, "")
    assert sentence.endswith(ending)
    assert "(1)" not in sentence
    assert "(Dice)" not in sentence
