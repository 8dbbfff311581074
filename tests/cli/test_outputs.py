"""What every verb says, and where: words, progress, one JSON document, the caution last."""

import json
import os
import subprocess
import sys

import pytest
from quick_commands import of_verb
from volmap_cli.main import main

from volmap.types.notice import caution

VERBS = ("screen", "mesh", "map", "certify", "carry", "loop", "measure", "report", "phantom", "demo")


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
    beads = "beads_carried_to_visit3.csv"
    assert {p.name for p in out.iterdir()} == {"phantom", "map_0_3", beads, f"{beads}.json"}


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


def test_the_broken_set_can_be_written(tmp_path, capsys):
    """As many folders as `make_all` names, each with its input; a taken place is refused."""
    from volmap_phantoms import broken

    named = {entry.name for entry in broken.make_all(tmp_path / "twin")}
    out = tmp_path / "set"
    assert main(["phantom", "broken", "--out", str(out), "--quiet"]) == 0
    assert (
        {p.name for p in out.iterdir()}
        == {p.name for p in (tmp_path / "twin").iterdir()}
        >= named - {"missing-file"}
    )
    assert main(["phantom", "broken", "--out", str(out), "--quiet"]) == 3
    capsys.readouterr()
