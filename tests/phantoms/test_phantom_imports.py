"""Phantoms share nothing with what they test."""

import ast
import subprocess
import sys
from pathlib import Path

import volmap_phantoms

FOLDER = Path(volmap_phantoms.__file__).parent


def imported(file):
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            yield node.module


def test_of_volmap_only_the_nouns_are_imported():
    # law of the house: of volmap only volmap.types, and their own package relatively
    files = sorted(FOLDER.glob("*.py"))
    assert len(files) > 10
    for file in files:
        ours = [m for m in imported(file) if m.split(".")[0].startswith("volmap")]
        assert all(m == "volmap.types" or m.startswith("volmap.types.") for m in ours), (file.name, ours)


def test_making_a_phantom_needs_no_finite_elements():
    # the stored motion is enough: scikit-fem is loaded only by the simulation
    code = (
        "import sys, volmap_phantoms.gel_column, volmap_phantoms.broken; "
        "assert not [m for m in sys.modules if m.split('.')[0] == 'skfem']"
    )
    subprocess.run([sys.executable, "-c", code], check=True, timeout=120)
