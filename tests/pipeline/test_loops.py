"""Loops of map folders: measured, told with what they prove, laid down as a table."""

import csv
import json
import shutil

import nibabel
import numpy as np
import pytest
from volmap_cli.main import main

from volmap import pipeline
from volmap.carry import move_points
from volmap.mapfolder import read_map_folder
from volmap.types import InputError


@pytest.fixture(scope="module")
def triangle(small_pair, third_visit):
    """Three visits of one body that grows evenly, and the maps 0 to 1, 2 to 1 and 0 to 2."""
    return [small_pair.folder, third_visit.back, third_visit.across]


@pytest.fixture(scope="module")
def told(triangle, tmp_path_factory):
    out = tmp_path_factory.mktemp("table") / "loop.csv"
    return pipeline.loop_folders(triangle, out=out), out


def test_a_loop_is_turned_where_needed_and_small(told):
    loop, _ = told
    assert [(f.code, f.where) for f in loop.findings] == [
        ("turned-map", "karte 2 zurück"),
        ("turned-map", "map 0 2"),
    ]
    assert [leg.turned for leg in loop.way.legs] == [False, True, True]
    # truth: the bodies are one body scaled and moved (`broken.body`), so exact maps close the loop; each map
    # of 1.65 mm voxels is known to about half a voxel inside (beads of the small pair)
    assert 0 < loop.error.mean_mm < 1.0
    assert loop.error.mean_mm <= loop.error.p95_mm <= loop.error.max_mm
    assert loop.error.defined + loop.error.continued > 0.99


def test_the_numbers_are_those_of_the_table(told, triangle):
    """An independent journey: each row again, through the three folders one by one."""
    loop, out = told
    with out.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert {r["kind"] for r in rows} == {"mesh point", "tet centroid", "by volume"}

    def numbers(words, chosen):
        return np.array([[float(r[f"{w}_mm"]) for w in words] for r in chosen])

    even = [r for r in rows if r["kind"] == "by volume" and r["loop_error_mm"]]
    error = numbers(["loop_error"], even)[:, 0]
    assert loop.error.mean_mm == pytest.approx(error.mean(), rel=1e-12)
    assert loop.error.p95_mm == pytest.approx(np.percentile(error, 95), rel=1e-12)
    some = even[::400]
    here, home = numbers("xyz", some), numbers(["home_x", "home_y", "home_z"], some)
    places = here
    for folder, turned in zip(triangle, (False, True, True), strict=True):
        step = read_map_folder(folder).map
        places = move_points(step.reversed() if turned else step, places, reach_mm=1.0).points
    np.testing.assert_allclose(places, home, atol=1e-9)
    np.testing.assert_allclose(np.linalg.norm(home - here, axis=1), numbers(["loop_error"], some)[:, 0])
    about = json.loads(out.with_name("loop.csv.json").read_text(encoding="utf-8"))
    assert about["loop_error_mm"]["mean"] == loop.error.mean_mm
    assert "proves no map right" in about["meaning"]
    assert len(about["scans"]) == 4
    assert about["scans"][0] == about["scans"][-1]


def test_the_terminal_says_what_it_proves(small_pair, triangle, capsys, told):
    assert main(["loop", *map(str, triangle), "--quiet"]) == 0
    said = capsys.readouterr().out
    assert "before.nii.gz -> nachher ü.nii.gz -> third.nii.gz -> before.nii.gz" in said
    assert told[0].sentence in said
    assert "cannot tell an accurate map from a wrong one" in said
    assert main(["loop", *map(str, triangle), "--quiet", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    sides = nibabel.load(small_pair.source).header.get_zooms()
    in_voxels = document["loop_error_mm"]["max"] / np.prod(sides, dtype=float) ** (1 / 3)
    assert document["loop_error_voxels"]["max"] == pytest.approx(in_voxels, rel=1e-6)
    assert "research" in document["notice"]


def test_there_and_back_by_one_pair_says_little(small_pair, tmp_path):
    """Law: a map and its exact inverse; the table would be of rounding alone, and a warning says so."""
    copy = shutil.copytree(small_pair.folder, tmp_path / "again")
    loop = pipeline.loop_folders([small_pair.folder, copy])
    assert loop.error.max_mm < 1e-9
    assert "one-pair-only" in {f.code for f in loop.findings}


def test_maps_that_lead_elsewhere_are_refused(triangle, tmp_path, capsys):
    with pytest.raises(InputError, match="do not lead back to where they start") as caught:
        pipeline.loop_folders(triangle[:2], out=tmp_path / "no.csv")
    assert caught.value.refused
    assert not list(tmp_path.iterdir())
    assert main(["loop", str(triangle[0])]) == 2
    assert "at least two map folders" in capsys.readouterr().err
    assert main(["loop", *map(str, triangle), "--out", str(tmp_path / "loop.txt"), "--quiet"]) == 3
    assert ".csv or .parquet" in capsys.readouterr().err
