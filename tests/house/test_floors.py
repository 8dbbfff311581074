"""The house's own rules: floors, styles, types. Law: imports run downward only (DEVELOPERS.md)."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
BIN = Path(sys.executable).parent


def run(*command):
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    return done.returncode, done.stdout + done.stderr


def test_imports_run_downward():
    status, told = run(str(BIN / "lint-imports"))
    assert status == 0, told
    assert "3 kept, 0 broken" in told


@pytest.mark.parametrize("arguments", [("check", "."), ("format", "--check", ".")])
def test_ruff(arguments):
    status, told = run(str(BIN / "ruff"), *arguments)
    assert status == 0, told


def test_types():
    status, told = run(str(BIN / "mypy"))
    assert status == 0, told


def test_top_level_is_as_planned():
    tracked = run("git", "ls-files")
    if tracked[0]:
        pytest.skip("not a git checkout")
    names = {line.split("/")[0] for line in tracked[1].splitlines()}
    assert names == {
        "README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml", ".gitignore",
        ".ci", "volmap", "cli", "tests", "phantoms", "shared",
    }  # fmt: skip


def test_the_caution_is_the_same_everywhere():
    caution = (ROOT / "shared" / "caution.txt").read_text().split()
    readme = (ROOT / "README.md").read_text().split()
    joined = " ".join(readme)
    assert " ".join(caution) in joined
    assert len((ROOT / "shared" / "caution_short.txt").read_text().strip().encode()) <= 79
