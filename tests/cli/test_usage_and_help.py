"""How the command is called: help, usage faults, what is imported for it."""

import re
import subprocess
import sys

import pytest
from volmap_cli.main import VERBS, main

from volmap.types.notice import caution

HEAVY = (
    "numpy",
    "numba",
    "scipy",
    "nibabel",
    "vtkmodules",
    "pyvista",
    "matplotlib",
    "skfem",
    "volmap.pipeline",
)


def flat(text):
    return " ".join(text.split())


@pytest.mark.parametrize("verb", VERBS)
def test_help_of_every_verb_has_one_worked_example(verb, capsys):
    with pytest.raises(SystemExit) as ended:
        main([verb, "--help"])
    assert ended.value.code == 0
    told = capsys.readouterr().out
    assert re.findall(r"^example: volmap (\w+)", told, re.MULTILINE) == [verb]
    assert "--json" in told
    assert "--quiet" in told
    assert flat(told).endswith(flat(caution()))


@pytest.mark.parametrize("verb", VERBS)
def test_the_example_is_understood_by_the_verb_itself(verb):
    from volmap_cli.main import _parser

    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("COLUMNS", "200")
        parser = _parser()
        action = next(a for a in parser._actions if a.dest == "verb")
        example = action.choices[verb].epilog.splitlines()[0].removeprefix("example: volmap ")
        assert parser.parse_args(example.split()).verb == verb


def test_root_help_names_every_verb_and_status(capsys):
    with pytest.raises(SystemExit) as ended:
        main(["--help"])
    assert ended.value.code == 0
    told = capsys.readouterr().out
    for verb in VERBS:
        assert re.search(rf"^ +{verb} ", told, re.MULTILINE)
    for status in ("0 done", "1 a gate failed", "2 usage", "3 an input", "130 interrupted"):
        assert status in flat(told)
    assert flat(told).endswith(flat(caution()))


def child(code, *arguments):
    return subprocess.run(
        [sys.executable, "-c", code, *arguments], capture_output=True, text=True, timeout=60, check=False
    )


@pytest.mark.parametrize("arguments", [("--help",), ("map", "--help"), ("--version",)])
def test_help_imports_nothing_heavy(arguments):
    code = (
        "import sys\n"
        "from volmap_cli.main import main\n"
        "try:\n    main(sys.argv[1:])\nexcept SystemExit:\n    pass\n"
        f"print([m for m in {HEAVY!r} if m in sys.modules], file=sys.stderr)\n"
    )
    ended = child(code, *arguments)
    assert ended.stdout
    assert ended.stderr.strip() == "[]"


def test_no_verb_shows_the_help_and_is_a_usage_fault(capsys):
    assert main([]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.startswith("usage: volmap")


def test_version(capsys):
    from importlib.metadata import version

    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"volmap {version('volmap')}\n"


@pytest.mark.parametrize(
    "arguments",
    [
        ["fold"],
        ["map", "a.nii.gz"],
        ["map", "a.nii.gz", "b.nii.gz"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--edge", "0"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--edge", "nan"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--edge", "two"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--energy", "magic"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--threads", "0"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--seed", "-1"],
        ["map", "a.nii.gz", "b.nii.gz", "--out", "m", "--uncertainty", "-1"],
        ["carry", "a.csv", "--out", "b.csv"],
        ["carry", "a.csv", "--out", "b.csv", "--through", "m", "--as", "points"],
        ["screen"],
        ["certify"],
    ],
)
def test_usage_faults_end_with_2(arguments, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SystemExit) as ended:
        main(arguments)
    assert ended.value.code == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.startswith("usage: ")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["phantom"], "gel-column"),
        (["phantom", "gelcolumn", "--out", "x"], "'gelcolumn'; there are gel-column"),
        (["phantom", "gel-column"], "--out DIR is missing"),
        (["screen", "a.nii", "b.nii", "--mend", "c.nii"], "--mend takes one FILE"),
        (["loop", "m", "n", "--overwrite"], "--overwrite replaces what --out names"),
        (["map", "a.nii", "b.nii", "--out", "m", "--threads", "4096"], "threads"),
    ],
)
def test_faults_of_use_that_only_the_verb_can_see(arguments, said, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(arguments) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert len(told.err.splitlines()) == 1
    assert said in told.err
    assert "--help" in told.err
    assert list(tmp_path.iterdir()) == []


def test_energies_offered_are_those_of_the_library():
    # Law: the command line names them itself, so that its help starts at once; the two lists are one.
    from volmap_cli import map as verb

    from volmap.kernels.energies import ENERGIES
    from volmap.mapping import MapSettings

    assert sorted(verb.ENERGIES) == sorted(ENERGIES)
    assert MapSettings().energy == verb.ENERGIES[0]
