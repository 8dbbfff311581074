"""The names ``volmap`` offers, and README's Python, word for word."""

import re
import subprocess
import sys
from pathlib import Path
from shutil import copyfile

import volmap

README = Path(__file__).parents[2] / "README.md"


def test_every_public_name_is_there_and_stays_callable_or_a_noun():
    # Law: a name means one thing however often it is asked for, and whatever was imported in between.
    first = {name: getattr(volmap, name) for name in volmap.__all__}
    assert all(getattr(volmap, name) is found and callable(found) for name, found in first.items())


def test_verbs_named_like_their_package_call_the_verb():
    # Importing volmap.carry binds the package in place of the name: a fresh interpreter, as a user has one.
    lines = (
        "import volmap, volmap.pipeline, volmap.carry.points",
        "from volmap.mesh.mesher import mesh",
        "assert type(volmap.mesh).__call__ is mesh",
        "try: volmap.screen(None)",
        "except AttributeError: print('called')",
    )
    done = subprocess.run([sys.executable, "-c", "\n".join(lines)], capture_output=True, text=True)
    assert done.stdout == "called\n", done.stderr


def test_the_python_of_the_readme_runs(small_pair, tmp_path, monkeypatch, capsys):
    section = README.read_text(encoding="utf-8").split("## From Python")[1].split("\n## ")[0]
    code = "\n".join(re.findall(r"^    (.*)$", section, re.MULTILINE))
    copyfile(small_pair.source, tmp_path / "visit0_labels.nii.gz")
    copyfile(small_pair.target, tmp_path / "visit1_labels.nii.gz")
    (tmp_path / "beads.csv").write_text("name,x_mm,y_mm,z_mm\none,0,-6,-8\n", encoding="utf-8")
    (tmp_path / "flow.csv").write_text(
        "name,x_mm,y_mm,z_mm,flow_x_mm_per_s,flow_y_mm_per_s,flow_z_mm_per_s\none,0,-6,-8,1,0,0\n",
        encoding="utf-8",
    )
    monkeypatch.chdir(tmp_path)
    names = {}
    exec(code, names)
    # Closed form (tests/conftest.py): y = 1.06 x + (1.5, 0, -1), up to a third of a voxel of 2 mm.
    assert abs(names["moved"].points[0] - [1.5, -6.36, -9.48]).max() < 0.7
    verdict, ratio = capsys.readouterr().out.split()
    assert verdict in ("pass", "warn")
    assert abs(float(ratio) - 1.06**3) < 0.03
