"""Files whole or not at all: places that are taken or cannot be, Ctrl-C, and what a first user gets wrong."""

import json
import os
import signal
import subprocess
import sys

import numpy as np
import pytest
from quick_commands import EDGE, of_verb
from volmap_cli.main import main

from volmap import pipeline
from volmap.pipeline import files


@pytest.mark.parametrize("verb", ["map", "mesh", "carry"])
def test_a_taken_place_is_refused_before_any_work(verb, small_pair, tmp_path, capsys, no_work):
    command = of_verb(verb, small_pair, tmp_path)
    out = command[command.index("--out") + 1]
    if verb == "map":
        os.mkdir(out)
        (tmp_path / "karte é" / "thesis.txt").write_text("mine", encoding="utf-8")
    else:
        (tmp_path / out).write_text("mine", encoding="utf-8")
    assert main([*command, "--quiet"]) == 3
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert os.path.basename(out) in said
    assert "--overwrite" in said


def test_overwrite_leaves_a_folder_of_something_else_alone(small_pair, tmp_path, capsys, no_work):
    command = of_verb("map", small_pair, tmp_path)
    (tmp_path / "karte é").mkdir()
    (tmp_path / "karte é" / "thesis.txt").write_text("mine", encoding="utf-8")
    assert main([*command, "--quiet", "--overwrite"]) == 3
    assert "certificate.json" in capsys.readouterr().err
    assert [p.name for p in (tmp_path / "karte é").iterdir()] == ["thesis.txt"]


def test_overwrite_replaces_a_map_folder_whole(small_pair, tmp_path, no_report):
    command = of_verb("map", small_pair, tmp_path)
    (tmp_path / "karte é").mkdir()
    (tmp_path / "karte é" / "certificate.json").write_text("{}", encoding="utf-8")
    (tmp_path / "karte é" / "left over.txt").write_text("old", encoding="utf-8")
    assert main([*command, "--quiet", "--overwrite"]) == 0
    assert not (tmp_path / "karte é" / "left over.txt").exists()
    assert pipeline.certify_folder(tmp_path / "karte é").disagreements == ()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["karte é", "point.csv"]


@pytest.mark.parametrize("verb", ["map", "mesh", "carry"])
@pytest.mark.parametrize("place", ["no such folder/x", "n" * 300])
def test_places_that_cannot_be(verb, place, small_pair, tmp_path, capsys, no_work):
    command = of_verb(verb, small_pair, tmp_path)
    at = command.index("--out") + 1
    command[at] = str(tmp_path / place) + ("" if verb == "map" else os.path.splitext(command[at])[1])
    assert main([*command, "--quiet"]) == 3
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert "; " in said
    assert [p.name for p in tmp_path.iterdir()] == ["point.csv"]


@pytest.mark.parametrize("verb", ["map", "mesh", "carry"])
def test_a_folder_that_may_not_be_written(verb, small_pair, tmp_path, capsys, no_work, monkeypatch):
    # the system's answer is stood in for: whoever runs the tests may be allowed everything
    usual = os.access
    monkeypatch.setattr(os, "access", lambda path, mode: not mode & os.W_OK and usual(path, mode))
    assert main([*of_verb(verb, small_pair, tmp_path), "--quiet"]) == 3
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert "cannot be written" in said
    assert "choose a folder you may write in" in said


@pytest.mark.parametrize(
    ("verb", "out", "ending"),
    [("mesh", "mesh.stl", ".vtu"), ("carry", "there.nii", ".csv"), ("screen", "mended.img", ".nii")],
)
def test_a_name_of_another_kind_is_refused_before_any_work(
    verb, out, ending, small_pair, tmp_path, capsys, no_work
):
    command = {
        "mesh": ["mesh", str(small_pair.source), "--out"],
        "carry": ["carry", "point.csv", "--through", str(small_pair.folder), "--out"],
        "screen": ["screen", str(small_pair.source), "--mend"],
    }[verb]
    assert main([*command, str(tmp_path / out), "--quiet"]) == 3
    said = capsys.readouterr().err
    assert out in said
    assert ending in said
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("stage", ["map", "report"])
def test_ctrl_c_leaves_nothing(stage, small_pair, tmp_path):
    command = ["map", str(small_pair.source), str(small_pair.target), "--out", str(tmp_path / "map"), *EDGE]
    child = subprocess.Popen(
        [sys.executable, "-m", "volmap_cli.main", *command],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=tmp_path,
    )
    for line in child.stderr:
        if f" s  {stage}" in line:
            break
    child.send_signal(signal.SIGINT)
    out, err = child.communicate(timeout=60)
    assert child.returncode == 130
    assert err.splitlines()[-1] == "volmap: interrupted; nothing was written"
    assert "Traceback" not in err
    assert out == ""
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "status", "said"),
    [
        (
            ["map", "A", "B", "--out", "m", "--edge", "0.05"],
            1,
            ["before.nii.gz", "too short", "mm or longer"],
        ),
        (
            ["map", "A", "B", "--out", "m", "--edge", "40"],
            1,
            ["before.nii.gz", "Kern é has no tets", "shorter --edge"],
        ),
        (["map", "A", "B", "--out", "m", "--edge", "400"], 1, ["before.nii.gz", "ask for a shorter edge"]),
        (["map", "A", "B", "--out", "m", "--gates", "no.toml"], 3, ["no.toml", "no such file", "gates.toml"]),
        (["map", "A", "B", "--out", "m", "--gates", "A"], 3, ["before.nii.gz", "gate table", "UTF-8"]),
        (["map", "A", "B", "--out", "m", "--source-image", "FAR"], 1, ["far.nii.gz", "no part of the body"]),
        (["map", "A", "M", "--out", "m"], 3, ["is a folder"]),
        (["certify", "A"], 3, ["before.nii.gz", "not a map folder", "map the pair first"]),
        (["report", "."], 3, ["not a map folder", "map the pair first"]),
        (["carry", "A", "--through", ".", "--out", "x.nii"], 3, ["not a map folder"]),
        (
            ["carry", "M/forward.nii.gz", "--through", "M", "--out", "x.nii"],
            1,
            ["is a displacement field", "not a thing to carry"],
        ),
        (["mesh", "gone.stl", "--out", "x.vtu"], 3, ["gone.stl", "no such file"]),
        (["phantom", "gel-column", "--voxel", "5000", "--out", "x"], 3, ["0.3 to 10 mm"]),
    ],
)
def test_what_a_first_user_may_get_wrong(arguments, status, said, small_pair, tmp_path, capsys, monkeypatch):
    import nibabel

    scan = nibabel.load(small_pair.source)
    affine = scan.affine + np.array([[0, 0, 0, 900.0]] + [[0.0] * 4] * 3)
    nibabel.save(nibabel.Nifti1Image(np.asarray(scan.dataobj), affine), small_pair.root / "far.nii.gz")
    monkeypatch.chdir(tmp_path)
    names = {"A": small_pair.source, "B": small_pair.target, "M": small_pair.folder}
    names["FAR"], names["M/forward.nii.gz"] = (
        small_pair.root / "far.nii.gz",
        small_pair.folder / "forward.nii.gz",
    )
    assert main([str(names.get(word, word)) for word in arguments] + ["--quiet"]) == status
    told = capsys.readouterr()
    assert len(told.err.splitlines()) == 1
    for words in said:
        assert words in told.err
    assert "; " in told.err
    assert list(tmp_path.iterdir()) == []


def test_mending_lists_every_change_and_replaces_only_when_told(small_pair, tmp_path, capsys):
    command = ["screen", str(small_pair.source), "--mend", str(tmp_path / "mended.nii.gz"), "--quiet"]
    assert main(command) == 0
    assert "0 changes; wrote" in capsys.readouterr().out
    assert main(command) == 3
    assert "--overwrite" in capsys.readouterr().err
    assert main([*command, "--overwrite", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["changes"] == []


@pytest.mark.skipif(not os.path.isdir("/proc/self"), reason="needs a file system nobody can write to")
def test_a_place_where_no_folder_can_be_made(capsys, small_pair, no_report):
    command = [
        "map",
        str(small_pair.source),
        str(small_pair.target),
        "--out",
        "/proc/map",
        *EDGE,
        "--one-order",
    ]
    assert main([*command, "--quiet"]) == 3
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert "cannot be written" in said
    assert "choose" in said


@pytest.mark.parametrize("moment", ["write_mesh", "write_field", "write_json"])
def test_ctrl_c_while_writing_leaves_nothing(moment, small_pair, tmp_path, capsys, monkeypatch, no_report):
    from volmap import mapfolder

    def interrupted(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr(mapfolder, moment, interrupted)
    assert main([*of_verb("map", small_pair, tmp_path), "--quiet"]) == 130
    told = capsys.readouterr()
    assert told.err == "volmap: interrupted; nothing was written\n"
    assert told.out == ""
    assert [p.name for p in tmp_path.iterdir()] == ["point.csv"]


def test_not_enough_memory_is_one_line(small_pair, tmp_path, capsys, monkeypatch):
    def short(*_, **__):
        raise MemoryError

    monkeypatch.setattr(files, "map_pair", short)
    assert main([*of_verb("map", small_pair, tmp_path), "--quiet"]) == 1
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert "memory" in said
    assert "--edge" in said
