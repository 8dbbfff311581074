"""What every verb leaves: words and JSON in their places, the caution last, files whole or not at all."""

import json
import os
import signal
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
import volmap_phantoms
from volmap_cli.main import main
from volmap_phantoms.broken import body
from volmap_phantoms.phantom import Phantom, Visit

from volmap import pipeline
from volmap.pipeline import files, reporting
from volmap.types import ImageVolume, Landmarks
from volmap.types.notice import caution

EDGE = ["--edge", "4.4"]  # mm; about 4000 tets


@pytest.fixture
def no_report(monkeypatch):
    """Leave the page out where it is not what is tested."""
    for module in (reporting, files):
        monkeypatch.setattr(module, "report_of", lambda *_, **__: "<!DOCTYPE html>\n")


@pytest.fixture
def no_work(monkeypatch):
    """Fail when anything is read, not to speak of mapped."""

    def worked(*_, **__):
        raise AssertionError("work began before the place was looked at")

    for name in ("read_labels_with_findings", "read_volume_with_findings", "read_landmarks", "map_pair"):
        monkeypatch.setattr(files, name, worked)


@pytest.fixture
def small_demo(monkeypatch, small_job, no_report):
    """The demo's job on the small pair of the tests."""
    volumes = [body(0), body(0), body(0), body(1)]
    beads = Landmarks(("a", "b"), np.array([[1.0, 2, 3], [-4, 2, 1]]))
    visits = tuple(Visit(v, ImageVolume(v.grid, 100.0 * v.labels), beads) for v in volumes)
    monkeypatch.setattr(
        volmap_phantoms, "make", lambda *_, **__: Phantom("small", visits, None, "two bodies")
    )
    usual, quick = pipeline.MapJob, replace(small_job, both_orders=False)
    monkeypatch.setattr(pipeline, "MapJob", lambda **options: usual(**options) if options else quick)


def of_verb(verb, pair, out):
    """A quick command of each verb."""
    scans = [str(pair.source), str(pair.target)]
    (out / "point.csv").write_text("name,x_mm,y_mm,z_mm\na,1,2,3\n", encoding="utf-8")
    return {
        "screen": ["screen", *scans],
        "mesh": ["mesh", scans[0], "--out", str(out / "mesh ü.vtu"), *EDGE],
        "map": ["map", *scans, "--out", str(out / "karte é"), *EDGE, "--one-order"],
        "certify": ["certify", str(pair.folder)],
        "carry": [
            "carry",
            str(out / "point.csv"),
            "--through",
            str(pair.folder),
            "--out",
            str(out / "there.csv"),
        ],
        "report": ["report", str(pair.folder)],
        "phantom": ["phantom", "--list"],
        "demo": ["demo", "--out", str(out / "demo")],
    }[verb]


VERBS = ("screen", "mesh", "map", "certify", "carry", "report", "phantom", "demo")


@pytest.mark.parametrize("verb", VERBS)
def test_words_on_stdout_progress_on_stderr_caution_last(verb, small_pair, tmp_path, capsys, small_demo):
    page = (small_pair.folder / "report.html").read_bytes()
    assert main(of_verb(verb, small_pair, tmp_path)) == 0
    told = capsys.readouterr()
    assert told.out.splitlines()[-1] == caution()
    for line in told.err.splitlines():
        assert line[:6].strip().replace(".", "").isdigit()  # seconds, then the stage
        assert line[6:10] == " s  "
    assert bool(told.err) == (verb != "phantom")
    (small_pair.folder / "report.html").write_bytes(page)


@pytest.mark.parametrize("verb", VERBS)
def test_json_is_one_document_and_quiet_is_quiet(verb, small_pair, tmp_path, capsys, small_demo):
    page = (small_pair.folder / "report.html").read_bytes()
    assert main([*of_verb(verb, small_pair, tmp_path), "--json", "--quiet"]) == 0
    told = capsys.readouterr()
    document = json.loads(told.out)
    assert isinstance(document, dict)
    assert document["notice"] == caution()
    assert told.err.splitlines()[-1] == caution()
    assert not any(" s  " in line[:10] for line in told.err.splitlines())
    assert str(tmp_path) not in told.out
    (small_pair.folder / "report.html").write_bytes(page)


def test_quiet_leaves_stderr_empty(small_pair, capsys):
    assert main(["certify", str(small_pair.folder), "--quiet"]) == 0
    told = capsys.readouterr()
    assert told.err == ""
    assert "the stored certificate holds" in told.out


def test_the_demo_replaces_a_demo_and_ends_by_saying_where_to_look(tmp_path, capsys, small_demo):
    out = tmp_path / "demo"
    (out / "map_0_3").mkdir(parents=True)
    (out / "map_0_3" / "certificate.json").write_text("{}", encoding="utf-8")
    assert main(["demo", "--out", str(out), "--quiet"]) == 3
    assert "--overwrite" in capsys.readouterr().err
    assert main(["demo", "--out", str(out), "--quiet", "--overwrite"]) == 0
    assert str(out / "map_0_3" / "report.html") in capsys.readouterr().out.splitlines()[-2]
    assert {p.name for p in out.iterdir()} == {"phantom", "map_0_3", "beads_carried_to_visit3.csv"}


def test_a_certificate_that_does_not_hold_is_loud(small_pair, tmp_path, capsys):
    import shutil

    folder = shutil.copytree(small_pair.folder, tmp_path / "doctored")
    path = folder / "certificate.json"
    document = json.loads(path.read_text(encoding="utf-8"))
    document["gates"][2]["value"]["mean"] = 0.0
    path.write_text(json.dumps(document), encoding="utf-8")
    assert main(["certify", str(folder), "--quiet", "--json"]) == 1
    told = capsys.readouterr()
    assert "DISAGREES: doctored: boundary_distance_mm: value.mean" in told.err
    second = json.loads(told.out)["second_opinion"]
    assert len(second["disagreements"]) == 1
    assert "boundary_distance_mm" in second["disagreements"][0]


def test_a_users_own_table_that_fails_a_gate_ends_with_1(small_pair, tmp_path, capsys, no_report):
    from importlib.resources import files as resources

    table = resources("volmap_shared").joinpath("gates.toml").read_text(encoding="utf-8")
    strict = table.replace("[gate.round_trip_mm]", "[gate.round_trip_mm]\nfail = { max_above = 1e-9 }", 1)
    head, _, tail = strict.partition("fail = { max_above = 1e-9 }\n")
    body_, rest = tail.split("\n[gate.", 1)
    kept = [line for line in body_.splitlines() if not line.startswith("fail")]
    own = tmp_path / "own.toml"
    own.write_text(
        head + "fail = { max_above = 1e-9 }\n" + "\n".join(kept) + "\n[gate." + rest, encoding="utf-8"
    )
    command = of_verb("map", small_pair, tmp_path)
    assert main([*command, "--quiet", "--gates", str(own)]) == 1
    assert "verdict: fail" in capsys.readouterr().out
    out = command[command.index("--out") + 1]
    assert main(["certify", out, "--quiet", "--gates", str(own)]) == 1
    assert "the stored certificate holds" in capsys.readouterr().out
    assert main(["certify", out, "--quiet"]) == 1
    assert "own.toml: name that with --gates" in capsys.readouterr().err


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


def test_a_reader_that_has_gone_is_no_fault():
    child = subprocess.Popen(
        [sys.executable, "-c", "import sys,time\nfrom volmap_cli.main import main\ntime.sleep(0.3)\n"
         "sys.exit(main(['phantom', '--list']))"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )  # fmt: skip
    child.stdout.close()
    said = child.stderr.read()
    child.stderr.close()
    assert child.wait(timeout=60) == 0
    assert said == ""


def test_the_installed_command_on_a_terminal_that_knows_ascii_alone(small_pair, tmp_path):
    environment = {k: v for k, v in os.environ.items() if not k.startswith(("LC_", "LANG", "PYTHON"))}
    environment |= {"PYTHONIOENCODING": "ascii"}
    ended = subprocess.run(
        [sys.executable, "-m", "volmap_cli.main", "screen", str(small_pair.target), "--quiet"],
        capture_output=True,
        text=True,
        env=environment,
        timeout=60,
        check=False,
    )
    assert ended.returncode == 0
    assert ended.stderr == ""
    assert "nachher \\xfc.nii.gz" in ended.stdout


class Terminal:
    """A stream that says it is a terminal and remembers."""

    def __init__(self):
        self.text = ""

    def isatty(self):
        return True

    def write(self, text):
        self.text += text

    def flush(self):
        pass


def test_progress_is_one_line_rewritten_on_a_terminal(monkeypatch):
    from volmap_cli.console import Console

    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    console = Console(as_json=False, quiet=False)
    console.progress("map", 3, 0, "boundary 0.230 mm")
    console.progress("map", 4, 9)
    console.fault("stop")
    assert "\n" not in terminal.text.split("volmap:")[0]
    parts = terminal.text.split("\r\x1b[2K")
    assert parts[1].endswith("map 3  boundary 0.230 mm")
    assert parts[2].endswith("map 4/9")
    assert parts[3] == "volmap: stop\n"


def test_progress_elsewhere_is_a_line_a_stage_and_one_now_and_then(monkeypatch, capsys):
    from volmap_cli import console as module

    clock = iter([0.0, 0.5, 0.6, 2.4, 2.9, 3.0])
    monkeypatch.setattr(module.time, "monotonic", lambda: next(clock))
    console = module.Console(as_json=False, quiet=False)
    for stage, step in (("mesh", 1), ("mesh", 2), ("mesh", 3), ("mesh", 4), ("map", 1)):
        console.progress(stage, step, 5)
    lines = [line.split("  ")[-1] for line in capsys.readouterr().err.splitlines()]
    assert lines == ["mesh 1/5", "mesh 4/5", "map 1/5"]


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
            ["more than one volume", "frame"],
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
