"""Every broken input through the command line: status, one line that names file, fault and remedy, no output.

Truth: the list of faults that comes with the inputs (`volmap_phantoms.broken`), planted byte by byte.
"""

import pytest
from volmap_cli.main import main
from volmap_phantoms.broken import make_all


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    folder = tmp_path_factory.mktemp("broken inputs")
    return folder, {entry.name: entry for entry in make_all(folder)}


NAMES = [
    "not-nifti",
    "gzip-cut",
    "gzip-damaged",
    "gzip-of-text",
    "empty-file",
    "text-file",
    "picture-file",
    "voxels-cut",
    "header-cut",
    "missing-file",
    "folder-for-file",
    "no-orientation",
    "nan-affine",
    "singular-affine",
    "zero-spacing",
    "two-dimensional",
    "many-frames",
    "rgb-voxels",
    "huge-dimensions",
    "negative-dimension",
    "metres",
    "micron-sized",
    "metre-sized",
    "interpolated-labels",
    "nan-labels",
    "negative-labels",
    "label-too-large",
    "nothing-labelled",
    "image-as-labels",
    "salt-and-pepper",
    "empty-slices",
    "label-missing",
    "other-label",
    "pieces-differ",
    "ring-against-ball",
    "hollow-against-solid",
    "guides-header",
    "guides-word",
    "guides-nan",
    "guides-twice",
    "guides-role",
    "guides-both-roles",
    "guides-short-row",
    "guides-no-rows",
    "guides-sd",
    "guides-outside",
    "guides-encoding",
    "surface-open",
    "surface-flipped",
    "surface-empty",
    "surface-damaged",
]


def test_every_broken_input_is_tried(bench):
    assert sorted(bench[1]) == sorted(NAMES)


def everything(folder):
    return sorted(str(p.relative_to(folder)) for p in folder.rglob("*"))


@pytest.mark.parametrize("name", NAMES)
def test_one_line_and_nothing_written(bench, name, capsys, monkeypatch, tmp_path):
    folder, entries = bench
    entry = entries[name]
    out = folder / name / ("out.vtu" if entry.arguments[0] == "mesh" else "out")
    before = everything(folder)
    monkeypatch.chdir(tmp_path)
    status = main([*entry.command(out), "--quiet"])
    said = capsys.readouterr().err
    assert status == entry.status
    lines = said.splitlines()
    assert len(lines) == 1
    assert lines[0].startswith("volmap: ")
    assert entry.unsaid(said) == []
    assert "; " in said.split(": ", 1)[1]  # a remedy follows
    assert "Traceback" not in said
    assert str(folder) not in said
    assert everything(folder) == before
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["gzip-cut", "salt-and-pepper", "guides-word", "surface-open"])
def test_the_same_with_json(bench, name, capsys):
    # a refused screen still is a result; a file that cannot be read gives none
    import json

    folder, entries = bench
    entry = entries[name]
    out = folder / name / ("out.vtu" if entry.arguments[0] == "mesh" else "out")
    assert main([*entry.command(out), "--quiet", "--json"]) == entry.status
    stdout = capsys.readouterr().out
    if name == "salt-and-pepper":
        assert json.loads(stdout)["refused"] is True
    else:
        assert stdout == ""
    assert not out.exists()
